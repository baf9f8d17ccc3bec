// Applied before the first paint, so that a dark page never flashes light. The choice is the viewer's own and stays
// in this browser; without one the system's setting holds.
(() => {
  let kept = null;
  try { kept = localStorage.getItem("slackwater-theme"); } catch { /* storage is switched off: the system decides */ }
  if (kept === "dark" || kept === "light") document.documentElement.dataset.theme = kept;
})();
