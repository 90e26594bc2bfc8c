// Follows the reader's light or dark setting from the first paint on, until the page's button is used.
"use strict";
(() => {
  const dark = window.matchMedia("(prefers-color-scheme: dark)");
  const root = document.documentElement;
  const follow = () => {
    if (!root.dataset.chosen) root.dataset.theme = dark.matches ? "dark" : "light";
  };
  follow();
  dark.addEventListener("change", follow);
})();
