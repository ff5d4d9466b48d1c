/* Closes an open <details data-closes> on Escape, and when the pointer or the focus goes elsewhere. */
"use strict";

document.querySelectorAll("details[data-closes]").forEach((details) => {
  const elsewhere = (event) => {
    if (details.open && !details.contains(event.target)) details.open = false;
  };
  document.addEventListener("pointerdown", elsewhere);
  document.addEventListener("focusin", elsewhere);
  details.addEventListener("keydown", (event) => {
    if (event.key === "Escape" && details.open) {
      details.open = false;
      details.querySelector("summary").focus();
    }
  });
});
