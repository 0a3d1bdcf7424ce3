// The page's behaviour: figures, theme, sliders, maps, print. All numbers come from the element "numbers".
"use strict";
(() => {
  const read = (id) => JSON.parse(document.getElementById(id).textContent);
  const data = read("numbers"), figures = read("figures"), themes = read("themes");
  const root = document.documentElement, find = (id) => document.getElementById(id);
  const sides = Object.keys(data.fronts), cells = data.cells;
  const views = {};

  // --- widths: Bokeh follows its place; the place keeps its width in print, where it is scaled down instead
  const PRINT_WIDTH = 686; // of an A4 page between its margins, in CSS pixels: (210 - 28) mm at 96 a 25.4 mm
  function setWidths() {
    for (const place of document.querySelectorAll(".plot")) place.style.width = "";
    const wide = [...document.querySelectorAll(".plot")].map((place) => [place, place.parentElement.clientWidth]);
    for (const [place, width] of wide) {
      place.style.width = `${width}px`;
      place.style.zoom = "";
      place.style.setProperty("--print-zoom", Math.min(1, PRINT_WIDTH / width));
      place.style.setProperty("--print-zoom-half", Math.min(1, 440 / width));
    }
  }

  // --- theme
  const system = window.matchMedia("(prefers-color-scheme: dark)");
  const back = Object.fromEntries(Object.entries(themes).map(([light, dark]) => [dark, light]));
  let shown = "light";
  function swapped(value, map) {
    if (typeof value === "string") return map[value] ?? value;
    if (value && typeof value === "object" && typeof value.value === "string" && map[value.value])
      return { ...value, value: map[value.value] };
    return value;
  }
  function recolour(map) {
    for (const view of Object.values(views)) {
      for (const model of view.model.references()) {
        const changed = {};
        for (const prop of model) {
          if (!prop.attr.endsWith("_color")) continue;
          const value = prop.get_value(), next = swapped(value, map);
          if (next !== value) changed[prop.attr] = next;
        }
        if (Object.keys(changed).length) model.setv(changed);
      }
    }
  }
  function effective() {
    return root.dataset.theme || (system.matches ? "dark" : "light");
  }
  function applyTheme() {
    const wanted = effective();
    if (wanted !== shown) recolour(wanted === "dark" ? themes : back);
    shown = wanted;
    root.dataset.shown = wanted;
    find("theme").textContent = wanted === "dark" ? "Light page" : "Dark page";
  }
  function keep(theme) {
    try { localStorage.setItem("breakstep-theme", theme); } catch { /* a page opened from a file may have no store */ }
  }
  try { const kept = localStorage.getItem("breakstep-theme"); if (kept) root.dataset.theme = kept; } catch { /* as above */ }
  find("theme").addEventListener("click", () => {
    root.dataset.theme = effective() === "dark" ? "light" : "dark";
    keep(root.dataset.theme);
    applyTheme();
  });
  system.addEventListener("change", applyTheme);

  // --- words
  const time = (s) => (s >= 1 ? `${s.toPrecision(3)} s` : `${Number((s * 1000).toPrecision(3))} ms`);
  const bytes = (n) => {
    for (const unit of ["B", "kB", "MB", "GB"]) {
      if (n < 1000) return unit === "B" ? `${n} B` : `${n.toFixed(1)} ${unit}`;
      n /= 1000;
    }
    return `${n.toFixed(1)} TB`;
  };
  const tile = (cell) => `${cells.block > 1 ? "tiles" : "tile"} ${cells.labels[cell]}`;

  // --- maps
  const maps = {};
  for (const grid of document.querySelectorAll("[data-map]")) {
    maps[grid.dataset.map] = {
      grid,
      cells: [...grid.querySelectorAll(".cell")],
      texts: [...grid.querySelectorAll("text[data-text]")],
      chosen: -1,
    };
  }
  function choose(map, cell, tell) {
    if (map.chosen >= 0) map.cells[map.chosen].classList.remove("chosen");
    map.chosen = cell;
    map.cells[cell].classList.add("chosen");
    tell(cell);
  }
  function neighbour(cell, dx, dy) {
    const [x, y] = cells.places[cell < 0 ? 0 : cell];
    if (cell < 0) return 0;
    let best = cell, least = Infinity;
    cells.places.forEach(([a, b], other) => {
      const along = (a - x) * dx + (b - y) * dy, aside = Math.abs((a - x) * dy) + Math.abs((b - y) * dx);
      if (along > 0 && along + 3 * aside < least) { least = along + 3 * aside; best = other; }
    });
    return best;
  }
  const ARROWS = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1] };
  function listen(map, tell) {
    const at = (event) => event.target.closest?.(".cell")?.dataset.cell;
    for (const kind of ["pointermove", "click"])
      map.grid.addEventListener(kind, (event) => { const cell = at(event); if (cell !== undefined) choose(map, Number(cell), tell); });
    map.grid.addEventListener("keydown", (event) => {
      const step = ARROWS[event.key];
      if (!step) return;
      event.preventDefault();
      choose(map, neighbour(map.chosen, ...step), tell);
    });
    map.grid.addEventListener("focus", () => { if (map.chosen < 0) choose(map, 0, tell); });
  }

  // --- step fronts and their moment
  const slider = find("moment");
  const end = Math.max(...sides.map((side) => data.fronts[side].span_s));
  const every = data.fronts[sides[0]].cycles_per_line; // cycles from line to line
  let pointed = -1;
  function cycleAt(side, cell, moment) {
    const { front_s, cycles, span_s } = data.fronts[side];
    if (moment >= span_s) return "end";
    let found = "–"; // before the first cycle
    for (let row = 0; row < cycles.length && front_s[row][cell] <= moment; row += 1) found = cycles[row];
    return found;
  }
  function showMoment() {
    const moment = (end * slider.value) / slider.max;
    const words = time(moment);
    find("moment-value").textContent = words;
    slider.setAttribute("aria-valuetext", words);
    for (const side of sides) {
      const span = views[`fronts-${side}`]?.model.select_one?.(`moment-${side}`);
      if (span) span.location = moment;
      const map = maps[`moment-${side}`];
      const found = cells.places.map((_, cell) => cycleAt(side, cell, moment));
      const numbers = found.filter((one) => typeof one === "number");
      const low = Math.min(...numbers), reach = Math.max(2, Math.max(...numbers) - low);
      map.cells.forEach((rect, cell) => {
        const ahead = typeof found[cell] === "number" ? (found[cell] - low) / reach : found[cell] === "end" ? 1 : 0;
        rect.style.setProperty("--v", (0.3 * ahead).toFixed(3));
      });
      map.texts.forEach((text, cell) => { text.textContent = found[cell]; });
    }
    sayMoment();
  }
  function sayMoment() {
    const moment = (end * slider.value) / slider.max;
    if (pointed < 0) {
      const spread = sides.map((side) => {
        const found = cells.places.map((_, cell) => cycleAt(side, cell, moment));
        const distinct = [...new Set(found)], numbers = found.filter(Number.isFinite);
        if (distinct.length === 1) return `${side}: all tiles in ${named(distinct[0])}`;
        return `${side}: tiles in cycles ${Math.min(...numbers)} to ${Math.max(...numbers) + every - 1}`;
      });
      find("fronts-readout").textContent = `At ${time(moment)}, ${spread.join("; ")}.`;
      return;
    }
    const said = sides.map((side) => `${side} in ${named(cycleAt(side, pointed, moment))}`);
    find("fronts-readout").textContent = `At ${time(moment)}, ${tile(pointed)}: ${said.join(", ")}.`;
  }
  const named = (cycle) => (cycle === "end" ? "its end" : cycle === "–" ? "its start" : every === 1 ? `cycle ${cycle}` : `cycles ${cycle} to ${cycle + every - 1}`);
  slider.addEventListener("input", showMoment);
  for (const side of sides) listen(maps[`moment-${side}`], (cell) => { pointed = cell; sayMoment(); });
  for (const holder of document.querySelectorAll("[data-fronts]")) {
    const move = (event) => {
      const view = views[`fronts-${holder.dataset.fronts}`];
      if (!view) return;
      const frame = view.frame.bbox, place = holder.querySelector(".plot").getBoundingClientRect();
      const x = view.frame.x_scale.invert(event.clientX - place.left);
      const row = Math.floor(view.frame.y_scale.invert(event.clientY - place.top));
      if (event.clientX - place.left < frame.left || row < 0 || row >= cells.places.length) return;
      pointed = row;
      slider.value = Math.round((Math.min(Math.max(x, 0), end) / end) * slider.max);
      showMoment();
    };
    holder.addEventListener("pointermove", move);
    holder.addEventListener("click", move);
  }

  // --- costs
  const cycle = find("cycle");
  const costSaid = { map: 0, cell: -1 };
  function showCosts() {
    const bin = Number(cycle.value), { relative, cycles, cycles_per_bin: width } = data.costs;
    const words = width > 1 ? `${cycles[bin]} to ${cycles[bin] + width - 1}` : `${cycles[bin]}`;
    find("cycle-value").textContent = words;
    cycle.setAttribute("aria-valuetext", `cycle ${words}`);
    relative.forEach((step, place) => {
      maps[`cost-${place}`].cells.forEach((rect, cell) => rect.style.setProperty("--v", Math.min(1, step[bin][cell] / 4).toFixed(3)));
    });
    const span = views.unevenness?.model.select_one?.("cycle");
    if (span) span.location = cycles[bin];
    sayCosts();
  }
  function sayCosts() {
    const bin = Number(cycle.value), { map, cell } = costSaid, { steps, relative, cycles, cpu_s, busiest_over_mean } = data.costs;
    if (cell < 0) {
      const uneven = busiest_over_mean[0][bin];
      find("costs-readout").textContent = uneven === null ? "" : `In cycle ${cycles[bin]} the busiest worker has ${uneven} times the mean worker's ${steps[0]} (${time(cpu_s[0][bin])} in all). Point at a tile for its cost.`;
      return;
    }
    find("costs-readout").textContent = `${steps[map]}, cycle ${cycles[bin]}, ${tile(cell)}: ${relative[map][bin][cell]} times the mean tile's cost.`;
  }
  if (cycle) {
    cycle.addEventListener("input", showCosts);
    data.costs.steps.forEach((_, place) => listen(maps[`cost-${place}`], (cell) => { costSaid.map = place; costSaid.cell = cell; sayCosts(); }));
  }

  // --- bytes
  const moved = data.traffic[sides[sides.length - 1]];
  listen(maps.bytes, (cell) => {
    const own = moved.faces.filter(([a, b]) => a === cell || b === cell);
    const total = own.reduce((sum, [, , count]) => sum + count, 0);
    const others = own.slice(0, 4).map(([a, b, count]) => `${bytes(count)} with ${tile(a === cell ? b : a)}`);
    find("bytes-readout").textContent = own.length
      ? `${tile(cell)} of worker ${cells.owners[cell]}: ${bytes(total)} to and from other workers; ${others.join(", ")}.`
      : `${tile(cell)}: nothing crosses to another worker.`;
  });
  find("bytes-readout").textContent = "Point at a tile, or go there with the arrow keys, for its bytes.";
  for (const name of Object.keys(maps).filter((one) => one.startsWith("chain-"))) listen(maps[name], () => {});

  // --- print: everything open, and closed again
  let opened = [];
  window.addEventListener("beforeprint", () => {
    opened = [...document.querySelectorAll("details:not([open])")];
    for (const one of opened) one.open = true;
  });
  window.addEventListener("afterprint", () => { for (const one of opened) one.open = false; opened = []; });

  // --- go
  let pending = 0;
  window.addEventListener("resize", () => {
    cancelAnimationFrame(pending);
    pending = requestAnimationFrame(() => { if (!window.matchMedia("print").matches) setWidths(); });
  });
  async function start() {
    setWidths();
    showMoment();
    if (cycle) showCosts();
    for (const [name, item] of Object.entries(figures)) {
      const place = find(`plot-${name}`);
      if (!place) continue;
      const manager = await Bokeh.embed.embed_item(item, place);
      views[name] = [...manager][0];
    }
    applyTheme();
    showMoment();
    if (cycle) showCosts();
    root.dataset.ready = "yes";
  }
  window.breakstep = { views, data };
  start();
})();
