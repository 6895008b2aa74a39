// The matrix of pathways: shade, width of the interval, recorded or not.
const MATRIX = (function matrix() {
  const n = TYPES.length;
  const place = new Map(TYPES.map((type, i) => [type.name, i]));
  const rows = new Map();
  for (const row of DATA.pathways) rows.set(place.get(row.pre_type) * n + place.get(row.post_type), row);
  const known = DATA.pathways.filter((row) => row.p_connect !== null);
  const top = Math.max(...known.map((row) => row.p_connect), 1e-6);
  // The square root keeps small probabilities apart.
  const part = (p) => Math.sqrt(p / top);
  let current = 0, open = null, cells = [], ring = null, side = 0;

  function interval(low, high) {
    return low === null || low === undefined || high === null ? "no interval" : `${LEVEL} interval ${number(low)}–${number(high)}`;
  }

  function words(code) {
    const row = rows.get(code);
    if (!row || row.p_connect === null) return `${pathwayName(code)}: no pair within the window.`;
    const window = row.distance_high_um === null ? "any distance" : `${number(row.distance_low_um)}–${number(row.distance_high_um)} µm`;
    const synapses = row.synapses_mean === null ? "" : ` ${number(row.synapses_mean)} synapses per connection.`;
    return `${pathwayName(code)}: probability ${number(row.p_connect)} within ${window}, ${interval(row.p_connect_low, row.p_connect_high)}, ${row.recorded ? "recorded" : "not recorded"}.${synapses}`;
  }

  function mark(code) {
    current = code;
    byId("matrix-readout").textContent = words(code);
  }

  function focus(code) {
    cells[current].setAttribute("tabindex", "-1");
    mark(code);
    cells[code].setAttribute("tabindex", "0");
    cells[code].focus();
  }

  function choose(code) {
    open = code;
    for (const [i, cell] of cells.entries()) cell.setAttribute("aria-selected", i === code);
    ringAt(code);
    showPathway(code, rows.get(code));
  }

  function ringAt(code) {
    const [x, y] = [code % n, Math.floor(code / n)];
    fill(ring, { x: x * side, y: y * side, width: side, height: side });
  }

  function cell(code) {
    const row = rows.get(code);
    const [x, y] = [(code % n) * side, Math.floor(code / n) * side];
    const g = draw("g", { role: "gridcell", tabindex: code === current ? "0" : "-1", "aria-label": words(code), "aria-selected": code === open, "data-code": code, transform: `translate(${x} ${y})` });
    if (!row || row.p_connect === null) {
      g.append(draw("rect", { class: "no-value", x: 0.5, y: 0.5, width: side - 1, height: side - 1 }));
      g.append(draw("circle", { class: "dot", cx: side / 2, cy: side / 2, r: 1.2 }));
      return g;
    }
    const edge = side < 20 ? 1.5 : 3, inner = side - 2 * edge, strip = Math.max(3, Math.round(inner * 0.27));
    g.append(draw("rect", { class: "strip", x: 0.5, y: 0.5, width: side - 1, height: side - 1 }));
    g.append(draw("rect", { x: edge, y: edge, width: inner, height: inner - strip, fill: shade(part(row.p_connect)) }));
    if (row.p_connect_low !== null && row.p_connect_high !== null) {
      const wide = Math.max(1, inner * (row.p_connect_high - row.p_connect_low));
      g.append(draw("rect", { class: "width-bar", x: edge, y: side - edge - strip + 1.5, width: wide, height: Math.max(strip - 1.5, 1.5) }));
    }
    if (row.recorded) g.append(draw("rect", { class: "recorded", x: 1, y: 1, width: side - 2, height: side - 2 }));
    return g;
  }

  // Room for the longest text, so that no text moves the cells under the pointer.
  function holdRoom() {
    const readout = byId("matrix-readout");
    const longest = [...rows.keys()].map(words).reduce((a, b) => (b.length > a.length ? b : a), "");
    readout.style.minHeight = "";
    readout.textContent = longest;
    readout.style.minHeight = `${Math.ceil(readout.getBoundingClientRect().height)}px`;
    mark(current);
  }

  function redraw() {
    const host = byId("matrix");
    holdRoom();
    const room = Math.max(host.clientWidth, 260);
    const label = Math.min(Math.max(...TYPES.map((t) => textWidth(t.name))) + 8, room < 500 ? 96 : 150);
    side = Math.max(13, Math.min(40, Math.floor((room - label - 4) / n)));
    const size = side * n;
    const svg = draw("svg", { width: label + size + 4, height: label + size + 4 });
    const grid = draw("g", { role: "grid", "aria-label": "Matrix of pathways, rows presynaptic, columns postsynaptic", transform: `translate(${label} ${label})` });
    cells = [];
    TYPES.forEach((type, i) => {
      const shown = cut(type.name, label - 8);
      const middle = (i + 0.5) * side + 4;
      svg.append(draw("text", { x: label - 5, y: label + middle, "text-anchor": "end" }, [draw("title", {}, type.name), shown]));
      svg.append(draw("text", { transform: `translate(${label + middle} ${label - 5}) rotate(-90)` }, [draw("title", {}, type.name), shown]));
      const line = draw("g", { role: "row", "aria-label": type.name });
      for (let j = 0; j < n; j += 1) {
        const one = cell(i * n + j);
        cells.push(one);
        line.append(one);
      }
      grid.append(line);
    });
    ring = draw("rect", { class: "focus-ring" });
    grid.append(ring);
    grid.addEventListener("pointerover", (event) => {
      const one = event.target.closest("[data-code]");
      if (one) byId("matrix-readout").textContent = words(Number(one.dataset.code));
    });
    grid.addEventListener("pointerleave", () => mark(current));
    grid.addEventListener("focusin", (event) => {
      mark(Number(event.target.dataset.code));
      ringAt(current);
    });
    grid.addEventListener("click", (event) => {
      const one = event.target.closest("[data-code]");
      if (one) { focus(Number(one.dataset.code)); choose(current); }
    });
    grid.addEventListener("keydown", keys);
    svg.append(grid);
    const hadFocus = host.contains(document.activeElement);
    host.replaceChildren(svg);
    ringAt(open ?? current);
    if (hadFocus) cells[current].focus({ preventScroll: true });
    legend();
  }

  function keys(event) {
    const [x, y] = [current % n, Math.floor(current / n)];
    const next = {
      ArrowLeft: [x - 1, y], ArrowRight: [x + 1, y], ArrowUp: [x, y - 1], ArrowDown: [x, y + 1],
      Home: [0, y], End: [n - 1, y],
    }[event.key];
    if (next) {
      event.preventDefault();
      const inside = (v) => Math.min(Math.max(v, 0), n - 1);
      focus(inside(next[1]) * n + inside(next[0]));
    } else if (event.key === "Enter" || event.key === " ") {
      event.preventDefault();
      choose(current);
      byId("pathway").focus({ preventScroll: false });
    }
  }

  function legend() {
    const host = byId("matrix-legend");
    const width = Math.min(host.clientWidth || 260, 320), bar = width - 24;
    const svg = draw("svg", { width, height: 38, role: "img", "aria-label": `Shade: probability 0 to ${number(top)}` });
    for (let i = 0; i < 48; i += 1) svg.append(draw("rect", { x: 10 + (bar * i) / 48, y: 4, width: bar / 48 + 0.6, height: 12, fill: shade((i + 0.5) / 48) }));
    for (const f of [0, 0.0625, 0.25, 0.5625, 1]) {
      const anchor = f === 0 ? "start" : f === 1 ? "end" : "middle";
      svg.append(draw("text", { x: 10 + bar * Math.sqrt(f), y: 31, "text-anchor": anchor }, number(f * top, 2)));
    }
    host.replaceChildren(svg);
  }

  const likely = DATA.pathways.filter((row) => row.recorded && row.p_connect !== null);
  const first = (likely.length ? likely : known)[0];
  if (first) current = place.get(first.pre_type) * n + place.get(first.post_type);
  open = first ? current : null;
  if (n > 20) byId("matrix-figure").parentElement.classList.add("many");
  figure(redraw);
  return { start() { mark(current); if (open !== null) choose(open); } };
})();
