"use strict";
// Hands the figures that the service has made to the charting library, in the colours of the page.
(() => {
  const place = document.getElementById("charts");
  if (!place || !window.Plotly) return;
  const EVERY_MS = 15000;
  const dark = window.matchMedia("(prefers-color-scheme: dark)");
  let last = 0;

  function colours() {
    const style = getComputedStyle(document.documentElement);
    return Object.fromEntries(["ink", "quiet", "rule", "accent", "second", "band", "sheet", "good", "stop", "warn"].map((name) => [name, style.getPropertyValue("--" + name).trim()]));
  }

  function coloured(trace, paint) {
    const colour = paint[trace.meta] || paint.accent;
    const made = { ...trace, hovertemplate: "%{y:.4g}<extra>" + trace.name + "</extra>" };
    if (trace.type === "bar") made.marker = { color: colour };
    else {
      made.line = { ...trace.line, color: colour, width: trace.meta === "band" ? 1 : 2 };
      made.marker = { color: colour, size: 5 };
    }
    if (trace.fill) made.fillcolor = colour + "66";
    if (trace.meta === "band") made.showlegend = false;
    return made;
  }

  function layout(given, paint) {
    const axis = { gridcolor: paint.rule, linecolor: paint.rule, zerolinecolor: paint.rule, automargin: true };
    return {
      ...given,
      xaxis: { ...axis, ...given.xaxis }, yaxis: { ...axis, ...given.yaxis },
      paper_bgcolor: paint.sheet, plot_bgcolor: paint.sheet,
      font: { color: paint.ink, family: "system-ui, sans-serif", size: 12 },
      margin: { l: 55, r: 10, t: 10, b: 45 }, showlegend: given.legend !== false,
      legend: { orientation: "h", y: 1.02, yanchor: "bottom", x: 0 },
    };
  }

  async function draw() {
    if (document.hidden) return;
    last = Date.now();
    const answer = await fetch(place.dataset.charts, { headers: { "X-Part": "1" }, cache: "no-store", redirect: "error" });
    if (!answer.ok) return;
    const told = await answer.json(), paint = colours();
    for (const plot of place.querySelectorAll("[data-plot]")) {
      const one = told[plot.dataset.plot];
      if (!one) continue;
      plot.closest("figure").querySelector(".says").textContent = one.says;
      if (!one.figure.data) continue;
      plot.classList.add("drawn");
      const traces = one.figure.data.map((trace) => coloured(trace, paint));
      await Plotly.react(plot, traces, layout(one.figure.layout, paint), { displayModeBar: false, responsive: true });
    }
  }

  // What the library draws is renewed less often than figures: it takes a phone some work.
  const again = () => draw().catch(() => {});
  document.addEventListener("renewed", () => { if (Date.now() - last > EVERY_MS) again(); });
  dark.addEventListener("change", again);
  again();
})();
