/* A form is sent once: a second press while the answer is on its way would ask for the same thing again. It takes the
   safety token of now: a login in another tab has changed the one that the page was drawn with. */
"use strict";
{
  const PATIENCE = 5000; // ms, after which the answer may be lost
  let sent = new WeakSet();
  const token = () => document.cookie.split("; ").find((one) => one.startsWith("csrftoken="))?.slice("csrftoken=".length);
  document.addEventListener("submit", (event) => {
    const form = event.target;
    if (event.defaultPrevented || form.method !== "post") return; // htmx sends it, or it only asks
    if (sent.has(form)) {
      event.preventDefault();
      return;
    }
    sent.add(form);
    setTimeout(() => sent.delete(form), PATIENCE);
    const field = form.querySelector("input[name=csrfmiddlewaretoken]");
    if (field && token()) field.value = token();
  });
  document.addEventListener("htmx:configRequest", (event) => {
    const { headers, parameters } = event.detail;
    if (!token()) return;
    if ("X-CSRFToken" in headers) headers["X-CSRFToken"] = token();
    if (parameters.csrfmiddlewaretoken) parameters.csrfmiddlewaretoken = token();
  });
  addEventListener("pageshow", () => { sent = new WeakSet(); }); // also when the reader comes back to the page
}
