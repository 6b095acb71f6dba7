// Keys of the bench. They work only while the focus is in the field's part, and in no box to write in.
"use strict";

document.addEventListener("keydown", (event) => {
  const sheet = document.getElementById("field-sheet");
  if (!sheet || !sheet.contains(event.target) || event.ctrlKey || event.metaKey || event.altKey) return;
  const written = event.target.matches("input:not([type=radio]):not([type=checkbox]), select, textarea");
  if (event.key === "Escape" && written) {
    document.getElementById("chosen").focus();
    return;
  }
  if (written) return;
  const found = sheet.querySelector(`[data-key="${CSS.escape(event.key)}"]`);
  if (!found || found.disabled) return;
  event.preventDefault();
  if (found.matches("input, select")) found.focus();
  else found.click();
});

// After a change the field's heading has the focus again, so that keys go on working.
document.addEventListener("htmx:after:swap", () => {
  const alarm = document.querySelector("#bench [role=alert]");
  const heading = document.getElementById("chosen");
  if (heading) heading.focus({ preventScroll: Boolean(alarm) });
  const current = document.querySelector(".list [aria-current]");
  if (current) current.scrollIntoView({ block: "nearest" });
});

// A fault's link marks its line in the text.
document.addEventListener("click", (event) => {
  const link = event.target.closest("a[data-line]");
  const box = document.getElementById("text");
  if (!link || !box) return;
  event.preventDefault();
  const lines = box.value.split("\n");
  const at = Number(link.dataset.line) - 1;
  const start = lines.slice(0, at).reduce((sum, line) => sum + line.length + 1, 0);
  box.focus();
  box.setSelectionRange(start, start + (lines[at] || "").length);
  box.scrollTop = (at / lines.length) * box.scrollHeight - box.clientHeight / 3;
});
