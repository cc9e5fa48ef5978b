/* The theme before anything is drawn: the one that was chosen here, else the system's. */
"use strict";
(() => {
  let chosen = null;
  try { chosen = localStorage.getItem("theme"); } catch { /* a private window */ }
  const dark = matchMedia("(prefers-color-scheme: dark)").matches;
  document.documentElement.dataset.theme = chosen ?? (dark ? "dark" : "light");
})();
