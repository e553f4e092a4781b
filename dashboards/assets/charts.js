// Draw each chart when it comes near the screen, in the colours of the scheme in force; redraw for print.
"use strict";

(function charts() {
  const plots = [...document.querySelectorAll(".plot")];
  const options = { displayModeBar: false, responsive: true, displaylogo: false };

  // A figure names colours by style sheet variable, such as "--v"; a probe gives the colour of the scheme in force.
  const probe = document.createElement("i");
  probe.hidden = true;
  document.body.append(probe);
  function colour(name) {
    probe.style.color = `var(${name})`;
    return getComputedStyle(probe).color;
  }
  function coloured(value) {
    if (Array.isArray(value)) return value.map(coloured);
    if (value && typeof value === "object") return Object.fromEntries(Object.entries(value).map(([key, each]) => [key, coloured(each)]));
    return typeof value === "string" && /^--[a-z0-9-]+$/.test(value) ? colour(value) : value;
  }

  // Paper is read from nearer than a screen: every text of the figure gets small letters.
  function small(value) {
    if (Array.isArray(value)) return value.forEach(small);
    if (!value || typeof value !== "object") return undefined;
    if (value.font) value.font.size = 10;
    if (value.nticks) value.nticks = 2;
    return Object.values(value).forEach(small);
  }

  function draw(plot, width) {
    const figure = JSON.parse(document.getElementById(plot.dataset.figure).textContent);
    const { data, layout } = coloured(figure);
    if (width) small({ layout });
    layout.width = width || plot.clientWidth;
    layout.height = plot.clientHeight || layout.height;
    if (layout.width < 520) { layout.margin.l = 46; layout.margin.r = 6; layout.showlegend = false; }
    return Plotly.react(plot, data, layout, { ...options, responsive: !width });
  }

  const seen = new IntersectionObserver((entries) => {
    for (const entry of entries) if (entry.isIntersecting) { seen.unobserve(entry.target); draw(entry.target); }
  }, { rootMargin: "400px" });
  for (const plot of plots) seen.observe(plot);

  const again = () => plots.filter((plot) => plot.firstChild).forEach((plot) => draw(plot));
  document.addEventListener("schemechange", again);
  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", again);
  let waiting = 0;
  addEventListener("resize", () => { cancelAnimationFrame(waiting); waiting = requestAnimationFrame(again); });
  matchMedia("print").addEventListener("change", (print) => { for (const plot of plots) draw(plot, print.matches ? 680 : 0); });
})();
