// Every page: colour scheme, finding rows by text, reading the wear calendar.
"use strict";

(function scheme() {
  const root = document.documentElement;
  const button = document.getElementById("scheme");
  const dark = () => root.dataset.scheme ? root.dataset.scheme === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
  const keep = (value) => { try { localStorage.setItem("burdenline-scheme", value); } catch { /* the choice lasts for this page only */ } };
  const kept = () => { try { return localStorage.getItem("burdenline-scheme"); } catch { return null; } };
  const name = () => { button.textContent = dark() ? "Light" : "Dark"; button.setAttribute("aria-label", dark() ? "Use light colours" : "Use dark colours"); };
  if (["light", "dark"].includes(kept())) root.dataset.scheme = kept();
  button.hidden = false;
  name();
  button.addEventListener("click", () => {
    root.dataset.scheme = dark() ? "light" : "dark";
    keep(root.dataset.scheme);
    name();
    document.dispatchEvent(new Event("schemechange"));
  });
})();

for (const field of document.querySelectorAll("input[data-filters]")) {
  const rows = document.getElementById(field.dataset.filters).querySelectorAll("tr");
  field.addEventListener("input", () => {
    const wanted = field.value.trim().toLowerCase();
    for (const row of rows) {
      if (row.closest("thead")) continue;
      row.hidden = wanted !== "" && !row.textContent.toLowerCase().includes(wanted);
    }
  });
}

(function wearCalendar() {
  const body = document.getElementById("patient-rows");
  const readout = document.getElementById("wear-readout");
  if (!body || !readout || !body.dataset.firstDay) return;
  body.addEventListener("pointermove", (move) => {
    const strip = move.target.closest(".wear");
    if (!strip) { readout.textContent = ""; return; }
    const hours = strip.dataset.hours.split(",");
    const box = strip.getBoundingClientRect();
    const place = Math.min(hours.length - 1, Math.max(0, Math.floor((move.clientX - box.left) / box.width * hours.length)));
    const day = new Date(`${body.dataset.firstDay}T12:00:00Z`);
    day.setUTCDate(day.getUTCDate() + place);
    const name = day.toLocaleDateString("en-GB", { weekday: "short", day: "numeric", month: "short", year: "numeric", timeZone: "UTC" });
    readout.textContent = `${name}: ${hours[place] === "" ? "not worn" : hours[place] + " analysable h"}`;
  });
})();
