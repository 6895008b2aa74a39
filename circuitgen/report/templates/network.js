// Degrees, pairs connected both ways, appositions by depth.
(function network() {
  const { bin, types } = DATA.degrees;

  function drawDegrees(key) {
    const host = byId(`degree-${key}`), words = byId(`degree-${key}-words`);
    const [excitatory, inhibitory] = DATA.degrees[key];
    const n = Math.max(excitatory.length, inhibitory.length, 1);
    words.textContent = `Cells by number of partners, bins of ${bin}. Ochre: excitatory cells, mean ${meanDegree(key, true)}. Teal outline: inhibitory cells, mean ${meanDegree(key, false)}.`;
    const area = chart(host, { xTop: n * bin, yTop: Math.max(...excitatory, ...inhibitory, 4), xWords: "partners", yWords: "cells", label: words.textContent, height: 200 });
    excitatory.forEach((count, i) => {
      if (count) area.svg.append(draw("rect", { class: "exc", x: area.x(i * bin) + 1, width: area.x(bin) - area.x(0) - 2, y: area.y(count), height: area.y(0) - area.y(count) }));
    });
    let d = `M${area.x(0)} ${area.y(0)}`;
    inhibitory.forEach((count, i) => { d += `V${area.y(count)}H${area.x((i + 1) * bin)}`; });
    if (inhibitory.length) area.svg.append(draw("path", { class: "line-inh", d: `${d}V${area.y(0)}` }));
  }

  function meanDegree(key, excitatory) {
    let sum = 0, cells = 0;
    types.forEach((row, i) => {
      if (TYPES[i].excitatory !== excitatory || !row.cells_n) return;
      sum += row[`${key}_mean`] * row.cells_n;
      cells += row.cells_n;
    });
    return cells ? number(sum / cells) : "–";
  }

  function reciprocityTable() {
    const signs = new Map(TYPES.map((type) => [type.name, type.excitatory]));
    const classes = [["excitatory with excitatory", 2], ["excitatory with inhibitory", 1], ["inhibitory with inhibitory", 0]];
    const head = ["", "pairs of cells", "connected both ways", "by chance", "ratio"];
    const rows = classes.map(([name, want]) => {
      const own = DATA.reciprocity.filter((row) => signs.get(row.a_type) + signs.get(row.b_type) === want);
      const sum = (key) => own.reduce((total, row) => total + row[key], 0);
      const [both, chance] = [sum("both_n"), sum("chance_n")];
      return [name, number(sum("pairs_n")), number(both), number(chance), chance ? number(both / chance) : "–"];
    });
    byId("reciprocity").replaceChildren(
      make("thead", {}, make("tr", {}, head.map((words) => make("th", { scope: "col" }, words)))),
      make("tbody", {}, rows.map((row) => make("tr", {}, row.map((v, i) => make(i ? "td" : "th", i ? {} : { scope: "row" }, v))))),
    );
  }

  function depthMap() {
    const host = byId("depth-map"), map = DATA.by_depth, n = map.length;
    const width = Math.min(Math.max(host.clientWidth, 260), 620), left = 58, top = 8, foot = 44;
    const size = (width - left - 12) / n;
    const most = Math.max(...map.flat(), 1), step = DATA.thickness_um / n;
    const total = map.flat().reduce((a, b) => a + b, 0);
    byId("depth-words").textContent = `Appositions by depth of the soma whose axon it is (down) and of the soma whose dendrite, soma or axon initial segment it meets (across), bins of ${number(step)} µm. Shade grows with the logarithm, up to ${number(most)} in one bin; blank: none. ${number(total)} appositions in all.`;
    const svg = draw("svg", { width, height: top + size * n + foot, role: "img", "aria-label": byId("depth-words").textContent });
    map.forEach((row, i) => row.forEach((count, j) => {
      if (!count) return;
      svg.append(draw("rect", { x: left + j * size, y: top + i * size, width: size + 0.4, height: size + 0.4, fill: shade(Math.log(count) / Math.log(Math.max(most, 2))) }));
    }));
    const at = (depth) => (depth / DATA.thickness_um) * size * n;
    DATA.profile.layers.forEach((layer) => {
      const [a, b] = [at(layer.top), at(layer.bottom)];
      svg.append(draw("rect", { x: left, y: top + a, width: size * n, height: b - a, fill: "none", stroke: "var(--line)" }));
      svg.append(draw("rect", { x: left + a, y: top, width: b - a, height: size * n, fill: "none", stroke: "var(--line)" }));
      if (b - a < 10) return;
      svg.append(draw("text", { x: left - 6, y: top + (a + b) / 2 + 4, "text-anchor": "end" }, [draw("title", {}, layer.name), cut(layer.name, left - 26)]));
      svg.append(draw("text", { x: left + (a + b) / 2, y: top + size * n + 16, "text-anchor": "middle" }, [draw("title", {}, layer.name), cut(layer.name, b - a)]));
    });
    svg.append(draw("text", { x: left + (size * n) / 2, y: top + size * n + 36, "text-anchor": "middle" }, "soma of the dendrite"));
    svg.append(draw("text", { transform: `translate(11 ${top + (size * n) / 2}) rotate(-90)`, "text-anchor": "middle" }, "soma of the axon"));
    host.replaceChildren(svg);
  }

  reciprocityTable();
  CSV.degrees = () => rowsOf(types);
  CSV.reciprocity = () => rowsOf(DATA.reciprocity);
  CSV.depths = () => {
    const step = DATA.thickness_um / DATA.by_depth.length;
    const edge = (i) => Number((i * step).toPrecision(8));
    return [["axon_soma_depth_low_um", "axon_soma_depth_high_um", "dendrite_soma_depth_low_um", "dendrite_soma_depth_high_um", "appositions_n"], ...DATA.by_depth.flatMap((row, i) => row.map((count, j) => [edge(i), edge(i + 1), edge(j), edge(j + 1), count]))];
  };
  figure(() => drawDegrees("out"));
  figure(() => drawDegrees("in"));
  figure(depthMap);
})();
