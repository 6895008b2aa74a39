// CSV links of the fixed figures, first drawing, and drawing again when the width changes.
for (const host of document.querySelectorAll("[data-csv]")) {
  host.append(csvLink(host.dataset.csv, CSV[host.dataset.csv]));
}
drawFigures();
MATRIX.start();

let lastWidth = document.documentElement.clientWidth, waiting = null;
window.addEventListener("resize", () => {
  const width = document.documentElement.clientWidth;
  if (width === lastWidth) return;
  lastWidth = width;
  clearTimeout(waiting);
  waiting = setTimeout(drawFigures, 120);
});
// Paper has its own width and light colours.
for (const [moment, paper] of [["beforeprint", true], ["afterprint", false]]) {
  window.addEventListener(moment, () => {
    document.documentElement.classList.toggle("for-paper", paper);
    drawFigures();
  });
}
window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", drawFigures);
