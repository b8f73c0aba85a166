// Light or dark, desk or projector: kept in this browser, never in the link.

const THEMES = ["auto", "light", "dark"];
const WORDS = { auto: "Light or dark: automatic", light: "Light", dark: "Dark" };

function keep() {
  const { theme, size } = document.documentElement.dataset;
  try {
    localStorage.setItem("softmode-look", JSON.stringify({ theme, size }));
  } catch {
    // private windows may refuse; the look then lasts as long as the page
  }
}

export function looks(redraw) {
  const root = document.documentElement;
  const theme = document.getElementById("look-theme");
  const size = document.getElementById("look-size");
  const show = () => {
    theme.textContent = WORDS[root.dataset.theme ?? "auto"];
    size.setAttribute("aria-pressed", String(root.dataset.size === "projector"));
  };
  theme.addEventListener("click", () => {
    const next = THEMES[(THEMES.indexOf(root.dataset.theme ?? "auto") + 1) % THEMES.length];
    if (next === "auto") delete root.dataset.theme;
    else root.dataset.theme = next;
    keep();
    show();
    redraw();
  });
  size.addEventListener("click", () => {
    if (root.dataset.size === "projector") delete root.dataset.size;
    else root.dataset.size = "projector";
    keep();
    show();
    redraw();
  });
  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", redraw);
  show();
}

// On paper: black on white, at the width of a page.
export function paper(plot, place) {
  const root = document.documentElement;
  window.addEventListener("beforeprint", () => {
    root.dataset.printing = "";
    plot.fixedWidth = 690;
    plot.shrink = 0.62;
    plot.draw();
  });
  window.addEventListener("afterprint", () => {
    delete root.dataset.printing;
    plot.fixedWidth = null;
    plot.shrink = 1;
    plot.draw();
    place();
  });
}
