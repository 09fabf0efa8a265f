"use strict";
(() => {
  const data = JSON.parse(document.getElementById("stops").textContent);
  const { stops, ys } = data;
  const slider = document.getElementById("promise");
  const first = stops[0].x;
  const span = stops[stops.length - 1].x - first || 1;
  const place = (i) => Math.round((1000 * (stops[i].x - first)) / span);
  const put = (id, text) => { document.getElementById(id).textContent = text; };
  const rows = [...document.querySelectorAll(".level[data-row]")].map((row) => ({
    sigma: row.querySelector(".f-sigma"), chosen: row.querySelector(".f-chosen"), spend: row.querySelector(".f-spend"),
    floor: row.querySelector(".f-floor"), was: row.querySelector(".was"), is: row.querySelector(".is"), way: row.querySelector(".way"),
  }));
  let at = -1;

  function showRow(row, [sigma, from, to, chosen, spend, floor]) {
    row.sigma.textContent = sigma;
    row.chosen.textContent = data.texts[chosen];
    row.spend.textContent = spend;
    if (row.floor) row.floor.textContent = floor || "today's level";
    row.is.style.left = `${from}%`;
    row.is.style.width = `${to - from}%`;
    const start = parseFloat(row.was.style.left);
    row.way.style.left = `${Math.min(start, from)}%`;
    row.way.style.width = `${Math.abs(from - start)}%`;
  }

  function show(i) {
    slider.value = place(i);
    if (i === at) return;
    at = i;
    const stop = stops[i];
    for (const key of ["yield", "ppm", "nines", "total", "label", "against", "unit", "capital", "spent", "lost", "price"]) {
      put(`r-${key}`, stop[key]);
    }
    const bought = document.getElementById("r-bought");
    bought.replaceChildren(...(stop.bought.length ? stop.bought : ["nothing"]).map((text) => {
      const item = document.createElement("li");
      item.textContent = text;
      return item;
    }));
    rows.forEach((row, r) => showRow(row, stop.rows[r]));
    const dot = document.getElementById("here-dot");
    dot.hidden = ys[i] === null;
    dot.style.left = `${stop.x}%`;
    dot.style.bottom = `${ys[i]}%`;
    document.getElementById("here-line").setAttribute("d", `M${stop.x} 100V${100 - (ys[i] ?? 0)}`);
    slider.setAttribute("aria-valuetext", `${stop.yield}, ${stop.ppm}, ${stop.nines}; ${stop.total} ${data.currency} a year`);
    slider.dataset.stop = i;
  }

  function nearest(value) {
    let best = 0;
    stops.forEach((_, i) => { if (Math.abs(place(i) - value) < Math.abs(place(best) - value)) best = i; });
    return best;
  }

  slider.disabled = false;
  slider.addEventListener("input", () => show(nearest(Number(slider.value))));
  slider.addEventListener("keydown", (event) => {
    const steps = { ArrowRight: 1, ArrowUp: 1, ArrowLeft: -1, ArrowDown: -1, PageUp: 5, PageDown: -5, Home: -stops.length, End: stops.length };
    if (!(event.key in steps)) return;
    event.preventDefault();
    show(Math.min(Math.max(at + steps[event.key], 0), stops.length - 1));
  });
  addEventListener("beforeprint", () => document.querySelectorAll("details").forEach((part) => { part.open = true; }));
  show(data.shown);
})();
