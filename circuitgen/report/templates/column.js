// Somata and whole cells from the side, and density by depth.
(function column() {
  const { layers, edges, built, wanted, per_mm3: dense } = DATA.profile;
  const thickness = DATA.thickness_um;
  const unit = dense ? "cells per mm³" : "cells per bin";
  let chosen = "all", cells = true;

  const picker = byId("column-picker");
  const select = make("select", { id: "column-type" }, [make("option", { value: "all" }, "all types"), ...TYPES.map((t, i) => make("option", { value: i }, cut(t.name, 220)))]);
  select.addEventListener("change", () => { chosen = select.value; side(); });
  picker.append(make("label", {}, ["Show the somata of", select]));
  if (DATA.shown_cells.length) {
    const box = make("input", { type: "checkbox", id: "column-cells" });
    box.checked = true;
    box.addEventListener("change", () => { cells = box.checked; side(); });
    picker.append(make("label", {}, [box, `with ${DATA.shown_cells.length} whole cells`]));
  }

  function dots(points, x, y, excitatory) {
    let d = "";
    for (let i = 0; i < points.length; i += 2) {
      const [a, b] = [x(points[i]).toFixed(1), y(points[i + 1]).toFixed(1)];
      d += excitatory ? `M${a} ${b}h.01` : `M${a} ${b}m-2.6 2.2h5.2l-2.6-4.8z`;
    }
    return d;
  }

  function side() {
    const host = byId("column-side");
    const room = Math.max(host.clientWidth, 260), labels = 64, foot = 24;
    const xs = DATA.somata.points.flatMap((p) => p.filter((_, i) => i % 2 === 0));
    const reach = cells ? DATA.shown_cells.flatMap((c) => c.lines.flatMap(([, p]) => p.filter((_, i) => i % 3 === 0))) : [];
    const deep = cells ? DATA.shown_cells.flatMap((c) => c.lines.flatMap(([, p]) => p.filter((_, i) => i % 3 === 2))) : [];
    const [left, right] = [Math.min(...xs, ...few(reach, Math.min)), Math.max(...xs, ...few(reach, Math.max))];
    const top = Math.min(0, ...few(deep.map((z) => thickness - z), Math.min));
    const bottom = Math.max(thickness, ...few(deep.map((z) => thickness - z), Math.max));
    const scale = Math.min((room - labels - 12) / Math.max(right - left, 1), 760 / (bottom - top));
    const height = Math.ceil((bottom - top) * scale) + foot;
    const width = Math.ceil(labels + 12 + (right - left) * scale);
    const start = labels;
    const x = (v) => start + (v - left) * scale, y = (depth) => (depth - top) * scale + 4;
    const svg = draw("svg", { width, height, role: "img", "aria-label": byId("column-words").textContent });
    for (const layer of layers) {
      svg.append(draw("line", { class: "grid", x1: 0, x2: width, y1: y(layer.top), y2: y(layer.top) }));
      svg.append(draw("text", { x: 0, y: y((layer.top + layer.bottom) / 2) + 4 }, [draw("title", {}, layer.name), cut(layer.name, labels - 6)]));
    }
    svg.append(draw("line", { class: "grid", x1: 0, x2: width, y1: y(thickness), y2: y(thickness) }));
    DATA.somata.points.forEach((points, i) => {
      if (chosen !== "all" && Number(chosen) !== i) return;
      const excitatory = TYPES[i].excitatory;
      const style = excitatory ? "fill:none;stroke:var(--exc);stroke-width:3;stroke-linecap:round" : "fill:var(--inh);stroke:none";
      svg.append(draw("path", { style, d: dots(points, x, y, excitatory), opacity: cells ? 0.45 : 0.9 }));
    });
    if (cells) DATA.shown_cells.forEach((one) => svg.append(cellPaths(one, x, (z) => y(thickness - z), 0)));
    const bar = roundSteps((right - left) / 3, 1).find((s) => s > 0);
    svg.append(draw("path", { class: "outline", d: `M${width - 12 - bar * scale} ${height - 6}h${bar * scale}` }));
    svg.append(draw("text", { x: width - 12, y: height - 11, "text-anchor": "end" }, `${number(bar)} µm`));
    host.replaceChildren(svg);
  }

  function few(values, pick) { return values.length ? [values.reduce((a, b) => pick(a, b))] : []; }

  function cellPaths(one, x, y, across) {
    const group = draw("g");
    for (const [wanted, style] of [[(k) => k === 2, "axon-line"], [(k) => k !== 2, "dendrite-line"]]) {
      let d = "";
      for (const [kind, p] of one.lines) {
        if (!wanted(kind)) continue;
        for (let i = 0; i < p.length; i += 3) d += `${i ? "L" : "M"}${x(p[i + across]).toFixed(1)} ${y(p[i + 2]).toFixed(1)}`;
      }
      group.append(draw("path", { class: style, d, "stroke-width": style === "axon-line" ? 0.9 : 1.6 }));
    }
    group.append(draw("circle", { class: signOf(one.type), cx: x(one.soma[across]), cy: y(one.soma[2]), r: 5, stroke: "var(--ink)", "stroke-width": 1.5 }));
    return group;
  }

  const shown = DATA.shown_cells.map((c) => `${TYPES[c.type].name} (cell ${c.cell_id})`).join(", ");
  byId("column-words").textContent = `Somata at their depth, ${DATA.somata.step > 1 ? `one in ${DATA.somata.step}, ` : ""}excitatory as ochre dots, inhibitory as teal triangles. ${shown ? `Whole cells in place, axon plum, dendrites moss: ${shown}. Lines are simplified for drawing.` : "No whole cells are drawn: the reconstructions that the run was built from are gone, were changed, or share a name."}`;

  function profiles() {
    const host = byId("profiles");
    host.replaceChildren(...TYPES.map((type, i) => lane(type, i)));
    TYPES.forEach((type, i) => drawLane(host.children[i].lastChild, i));
  }

  function lane(type) {
    return make("div", {}, [make("div", { class: "lane-name", title: type.name }, cut(type.name, 220)), make("div")]);
  }

  function drawLane(host, i) {
    const width = Math.max(host.clientWidth, 90), height = 170, foot = 18;
    const most = Math.max(...built[i], ...wanted[i].map((v) => v ?? 0), 1e-9);
    const x = (v) => ((width - 4) * v) / most, y = (depth) => ((height - foot) * depth) / thickness;
    const total = wanted[i].some((v) => v !== null);
    const svg = draw("svg", { width, height, role: "img", "aria-label": `${TYPES[i].name}: up to ${number(Math.max(...built[i]))} ${unit}${total ? `; spec: ${layers.map((l, k) => [l.name, wanted[i][k]]).filter(([, v]) => v !== null).map(([name, v]) => `${name} ${number(v)}`).join(", ")}` : ""}` });
    for (const layer of layers) svg.append(draw("line", { class: "grid", x1: 0, x2: width, y1: y(layer.bottom), y2: y(layer.bottom) }));
    built[i].forEach((v, k) => {
      if (v) svg.append(draw("rect", { class: signOf(i), x: 0, width: x(v), y: y(edges[k]) + 0.5, height: Math.max(y(edges[k + 1]) - y(edges[k]) - 1, 1) }));
    });
    layers.forEach((layer, k) => {
      if (wanted[i][k] === null) return;
      svg.append(draw("path", { class: "outline", d: `M0 ${y(layer.top)}H${x(wanted[i][k])}V${y(layer.bottom)}H0` }));
    });
    svg.append(draw("text", { x: 0, y: height - 4 }, `to ${number(most)}`));
    host.replaceChildren(svg);
  }

  byId("profiles-words").textContent = `Depth grows downward from the pia, lines where layers end. Bars: built, in bins of ${number(edges[1] - edges[0])} µm. Ink outline: what the spec asks for. Unit: ${unit}; each type has its own scale.`;
  CSV.somata = () => [["cell_type", "x_um", "depth_um"], ...DATA.somata.points.flatMap((p, i) => Array.from({ length: p.length / 2 }, (_, k) => [TYPES[i].name, p[2 * k], p[2 * k + 1]]))];
  CSV.profile = () => [["cell_type", "depth_low_um", "depth_high_um", dense ? "built_per_mm3" : "built_cells", "spec_per_mm3"], ...built.flatMap((values, i) => values.map((v, k) => {
    const middle = (edges[k] + edges[k + 1]) / 2;
    const layer = layers.findIndex((l) => middle >= l.top && middle < l.bottom);
    return [TYPES[i].name, edges[k], edges[k + 1], v, wanted[i][layer] ?? null];
  }))];
  figure(side);
  figure(profiles);
})();
