/* A form is sent once: a second press while the answer is on its way would ask for the same thing again. */
"use strict";
{
  const PATIENCE = 5000; // ms, after which the answer may be lost
  let sent = new WeakSet();
  document.addEventListener("submit", (event) => {
    const form = event.target;
    if (event.defaultPrevented || form.method !== "post") return; // htmx sends it, or it only asks
    if (sent.has(form)) {
      event.preventDefault();
      return;
    }
    sent.add(form);
    setTimeout(() => sent.delete(form), PATIENCE);
  });
  addEventListener("pageshow", () => { sent = new WeakSet(); }); // also when the reader comes back to the page
}
