// The little that pages do by themselves; everything works without it, only less at once.
"use strict";

// A page that is told to forget loses unsaved words: ask before it is left.
let unsaved = false;
document.addEventListener("input", (event) => {
  if (event.target.closest("[data-unsaved]")) unsaved = true;
});
document.addEventListener("submit", () => { unsaved = false; });
window.addEventListener("beforeunload", (event) => {
  if (unsaved) event.preventDefault();
});
