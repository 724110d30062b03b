"use strict";

/* Forms that htmx replaces while they are filled in (data-live): an answer to a question that was asked before the last
   key was pressed is not put in place, since it would bring back what stood there then. The next change asks again. */
{
  const typedSince = new WeakSet();
  document.addEventListener("htmx:beforeRequest", (event) => typedSince.delete(event.detail.elt));
  document.addEventListener("input", (event) => {
    const form = event.target.closest("form[data-live]");
    if (form) typedSince.add(form);
  });
  document.addEventListener("htmx:beforeSwap", (event) => {
    if (typedSince.has(event.detail.requestConfig.elt)) event.detail.shouldSwap = false;
  });
}
