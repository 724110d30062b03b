/* What stands above the place that a link names grows while it is drawn. The place stays in view until the reader moves. */
"use strict";
{
  const LONGEST = 5000;
  const keep = () => document.querySelector(":target")?.scrollIntoView();
  const growth = new ResizeObserver(keep);
  const end = () => growth.disconnect();
  const begin = () => {
    if (!document.querySelector(":target")) return;
    growth.observe(document.getElementById("content"));
    setTimeout(end, LONGEST);
  };
  for (const move of ["wheel", "touchmove", "keydown", "pointerdown"]) addEventListener(move, end, { passive: true });
  addEventListener("hashchange", begin);
  addEventListener("load", begin); // there is no target before
}
