// Draws the charts of a page from their documents, in the shade and at the width of the screen.
// A page without scripts shows the same charts as pictures; the numbers stand in tables either way.
"use strict";

(() => {
  const options = {
    mode: "vega-lite",
    actions: false,
    ast: true,
    defaultStyle: false,
    renderer: "canvas",
    tooltip: { disableDefaultStyle: true, theme: "custom" },
  };
  const dark = window.matchMedia("(prefers-color-scheme: dark)");
  const drawn = new WeakMap();

  async function draw(canvas) {
    const width = Math.floor(canvas.getBoundingClientRect().width);
    const shade = dark.matches ? "dark" : "light";
    const key = `${shade} ${width}`;
    if (width === 0 || drawn.get(canvas) === key) return;
    drawn.set(canvas, key);
    const answer = await fetch(`${canvas.dataset.chart}?shade=${shade}&width=${width}`, { credentials: "same-origin" });
    if (!answer.ok) {
      canvas.textContent = "The chart could not be fetched; its numbers are in the table.";
      return;
    }
    const chart = await answer.json();
    if (drawn.get(canvas) !== key) return;
    await window.drawChart(canvas, chart, options);
    canvas.dataset.drawn = key;
  }

  const canvases = document.querySelectorAll("[data-chart]");
  const drawAll = () => canvases.forEach(draw);
  let waiting = 0;
  window.addEventListener("resize", () => {
    window.clearTimeout(waiting);
    waiting = window.setTimeout(drawAll, 150);
  });
  document.addEventListener("toggle", drawAll, true);
  dark.addEventListener("change", drawAll);
  drawAll();
})();
