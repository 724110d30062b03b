/* Moves the caret of the mechanism's text to the place that a problem names. */
"use strict";
(() => {
  /* Where line and column (both from 1, counted in characters as the checks count) lie in the value. */
  const offsetOf = (value, line, column) => {
    const lines = value.split("\n");
    const before = lines.slice(0, line - 1).reduce((sum, text) => sum + text.length + 1, 0);
    const within = Array.from(lines[line - 1] ?? "").slice(0, column - 1).join("").length;
    return Math.min(before + within, value.length);
  };
  document.addEventListener("click", (event) => {
    const link = event.target.closest("a[data-line]");
    const text = document.getElementById("id_text");
    if (!link || !(text instanceof HTMLTextAreaElement)) return;
    event.preventDefault();
    const line = Number(link.dataset.line);
    const at = offsetOf(text.value, line, Number(link.dataset.column));
    text.focus();
    text.setSelectionRange(at, Math.min(at + 1, text.value.length));
    const height = parseFloat(getComputedStyle(text).lineHeight) || 20;
    text.scrollTop = Math.max(0, (line - 3) * height);
  });
})();
