// Sets the chosen colours before anything is painted: "light", "dark", or as the system has it. No module, so that no
// page in the other colours is seen first.
(() => {
  "use strict";
  let chosen = null;
  try {
    chosen = localStorage.getItem("strandline-theme");
  } catch {
    chosen = null; // storage may be forbidden; then it is as the system has it
  }
  if (chosen === "light" || chosen === "dark") document.documentElement.dataset.theme = chosen;
})();
