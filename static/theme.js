// Runs before the page is painted: puts the look that this browser last chose on the root element.
"use strict";
(() => {
  const root = document.documentElement;
  let kept = {};
  try {
    kept = JSON.parse(localStorage.getItem("softmode-look") || "{}");
  } catch {
    kept = {};
  }
  if (kept.theme === "light" || kept.theme === "dark") root.dataset.theme = kept.theme;
  if (kept.size === "projector") root.dataset.size = "projector";
})();
