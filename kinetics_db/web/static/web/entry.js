/* Proposes names of the kind of source that is chosen in a row of charges or portions. */
"use strict";
{
  // Concentrations come by themselves where scripts run.
  const withoutScript = () => document.querySelectorAll(".without-script").forEach((button) => { button.hidden = true; });
  withoutScript();
  document.addEventListener("change", (event) => {
    const chosen = event.target;
    if (!(chosen instanceof HTMLSelectElement) || !chosen.name.endsWith("-kind")) return;
    const source = document.getElementById(chosen.id.replace(/kind$/, "source"));
    if (source) source.setAttribute("list", `${chosen.value}-names`);
  });
}
