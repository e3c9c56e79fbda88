/* Day or night, set before the first paint: the reader's choice, else what the system asks for. */
(function () {
  var chosen = null;
  try {
    chosen = localStorage.getItem("skylag.theme");
  } catch (error) {
    chosen = null;
  }
  var dark = window.matchMedia && window.matchMedia("(prefers-color-scheme: dark)").matches;
  document.documentElement.dataset.theme = chosen === "day" || chosen === "night" ? chosen : dark ? "night" : "day";
})();
