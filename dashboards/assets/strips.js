// A caliper on every strip: time and voltage at the pointer, and the distance to a foot set by click or space.
"use strict";

for (const figure of document.querySelectorAll(".strip")) {
  const pane = figure.querySelector(".window");
  const svg = pane.querySelector("svg");
  const readout = figure.querySelector(".caliper");
  const [width, height] = [svg.viewBox.baseVal.width, svg.viewBox.baseVal.height];
  const zero = Number(svg.dataset.zero);
  const UNITS_PER_S = 250, UNITS_PER_MV = 100;
  let foot = null, place = null;

  function line(name, x) {
    let mark = svg.querySelector(`.cursor.${name}`);
    if (!mark) {
      mark = document.createElementNS("http://www.w3.org/2000/svg", "path");
      mark.setAttribute("class", `cursor ${name}`);
      svg.append(mark);
    }
    mark.setAttribute("d", `M${x} 0V${height}`);
  }

  function show() {
    line("head", place.x);
    let text = `${(place.x / UNITS_PER_S).toFixed(2)} s, ${((zero - place.y) / UNITS_PER_MV).toFixed(2)} mV`;
    if (foot) {
      const apart_s = Math.abs(place.x - foot.x) / UNITS_PER_S;
      text += ` · from the foot ${(apart_s * 1000).toFixed(0)} ms, ${((foot.y - place.y) / UNITS_PER_MV).toFixed(2)} mV`;
      if (apart_s > 0.2) text += `, ${(60 / apart_s).toFixed(0)} /min`;
    }
    readout.textContent = text;
  }

  function at(event) {
    const box = svg.getBoundingClientRect();
    return { x: Math.round((event.clientX - box.left) / box.width * width), y: Math.round((event.clientY - box.top) / box.height * height) };
  }

  svg.addEventListener("pointermove", (event) => { place = at(event); show(); });
  svg.addEventListener("click", (event) => { place = foot = at(event); line("foot", foot.x); show(); });
  pane.addEventListener("keydown", (event) => {
    const step = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1] }[event.key];
    if (!step && event.key !== " ") return;
    event.preventDefault();
    place = place || { x: 0, y: zero };
    if (step) {
      const stride = event.shiftKey ? 50 : 5;
      place = { x: Math.min(width, Math.max(0, place.x + step[0] * stride)), y: Math.min(height, Math.max(0, place.y + step[1] * stride)) };
    } else { foot = { ...place }; line("foot", foot.x); }
    show();
  });
}
