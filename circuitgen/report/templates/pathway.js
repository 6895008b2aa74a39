// One pathway: probability by distance, synapses, appositions, delays.
let PATHWAY = null; // what the panel shows

function recordedPoints(code) {
  const n = TYPES.length;
  const [pre, post] = [TYPES[Math.floor(code / n)].name, TYPES[code % n].name];
  const holds = (name, type) => name === type || (DATA.groups[name] || []).includes(type);
  return DATA.recordings.filter((row) => row.p_measured !== null && holds(row.pre_type, pre) && holds(row.post_type, post));
}

function curveRows(curve) {
  const head = ["distance_low_um", "distance_high_um", "pairs_n", "p_connect", "p_connect_low", "p_connect_high"];
  const rows = (curve.n || []).map((n, i) => {
    const low = (curve.first + i) * DATA.bin_um;
    return [low, low + DATA.bin_um, n, curve.p[i], curve.low ? curve.low[i] : null, curve.high ? curve.high[i] : null];
  });
  return [head, ...rows];
}

function pathwayFacts(row) {
  const range = (low, high) => (low === null || low === undefined || high === null || high === undefined ? "" : ` (${number(low)}–${number(high)})`);
  const window = row.distance_high_um === null ? "any distance" : `${number(row.distance_low_um)}–${number(row.distance_high_um)} µm`;
  const half = row.p_connect_low_50 === undefined ? "" : `; 50 %${range(row.p_connect_low_50, row.p_connect_high_50)}`;
  const facts = [
    [`Probability, ${window}`, `${number(row.p_connect)}${range(row.p_connect_low, row.p_connect_high)}${half}`],
    ["Share of pairs that touch there", number(row.p_ceiling)],
    ["Synapses per connection", `${number(row.synapses_mean)}${range(row.synapses_mean_low, row.synapses_mean_high)}`],
    ["Ordered pairs", number(row.pairs_n)],
    ["Pairs with an apposition", number(row.touching_pairs_n)],
    ["Appositions per touching pair", number(row.appositions_mean)],
    ["Recorded", row.recorded ? "yes: its own recording decides" : "no: taken from like pathways"],
  ];
  return make("dl", { class: "facts" }, facts.flatMap(([k, v]) => [make("dt", {}, k), make("dd", {}, v)]));
}

function showPathway(code, row) {
  PATHWAY = { code, row };
  const panel = byId("pathway");
  panel.replaceChildren(make("h3", {}, pathwayName(code)));
  if (!row) return;
  panel.append(pathwayFacts(row));
  panel.append(make("p", { class: "how" }, `In brackets: ${LEVEL} interval, where there is one.`));
  const detail = DATA.details[String(code)];
  if (!detail) {
    panel.append(make("p", {}, "No pair of these types touches in this circuit."));
    return;
  }
  const parts = [
    ["distance", "Probability by distance of the somata", () => curveRows(detail.curve)],
    ["synapses", "Synapses per connection, drawn circuit", () => histogramRows("synapses", detail.synapses, 1)],
    ["appositions", "Appositions per touching pair", () => histogramRows("appositions", detail.appositions, 1)],
    ["delays", "Mean delay of a connection, drawn circuit", () => delayRows(detail.delays)],
  ];
  const blocks = make("div", { class: "parts" });
  panel.append(blocks);
  for (const [key, title, rows] of parts) {
    const block = make("figure", { "data-part": key }, [make("h4", {}, title), make("div", { class: "plot" }), make("figcaption")]);
    block.append(make("p", { class: "data" }, csvLink(`${key}-${code}`, rows)));
    blocks.append(block);
  }
  drawPathway();
}

function histogramRows(name, counts, first) {
  return [[`${name}_n`, "count"], ...counts.map((count, i) => [i, count]).slice(first)];
}

function delayRows(counts) {
  const bin = DATA.delay_bin_ms;
  const edge = (i) => Number((i * bin).toPrecision(6));
  return [["delay_low_ms", "delay_high_ms", "connections_n"], ...counts.map((count, i) => [edge(i), edge(i + 1), count])];
}

function drawPathway() {
  if (!PATHWAY || !DATA.details[String(PATHWAY.code)]) return;
  const { code } = PATHWAY;
  const detail = DATA.details[String(code)];
  const tone = signOf(Math.floor(code / TYPES.length));
  const part = (key) => {
    const block = byId("pathway").querySelector(`[data-part=${key}]`);
    return [block.querySelector(".plot"), block.querySelector("figcaption")];
  };
  drawDistance(...part("distance"), detail.curve, tone, code);
  const average = (counts, words) => (counts.length ? `Mean ${number(mean(counts, 1))} ${words}.` : `No ${words.split(" ")[0]} drawn.`);
  drawBars(...part("synapses"), { counts: detail.synapses, tone, xWords: "synapses", yWords: "connections" }, average(detail.synapses, "synapses per connection"));
  drawBars(...part("appositions"), { counts: detail.appositions, tone, xWords: "appositions", yWords: "pairs" }, average(detail.appositions, "appositions per touching pair"));
  const delay = mean(detail.delays);
  drawBars(...part("delays"), { counts: detail.delays, tone, xWords: "delay (ms)", yWords: "connections", width: DATA.delay_bin_ms, offset: 0, whole: false }, delay === null ? "No connection drawn." : `Mean ${number((delay + 0.5) * DATA.delay_bin_ms)} ms, from bins of ${DATA.delay_bin_ms} ms.`);
}

function drawBars(plot, caption, options, words) {
  caption.textContent = words;
  if (!options.counts.length) { plot.replaceChildren(); return; }
  bars(plot, { offset: 1, label: `${options.yWords} by ${options.xWords}. ${words}`, ...options });
}

function drawDistance(plot, caption, curve, tone, code) {
  if (!curve.p) { plot.replaceChildren(); caption.textContent = "No pair touches."; return; }
  const at = (i) => (curve.first + i + 0.5) * DATA.bin_um;
  const points = recordedPoints(code);
  const values = [...curve.p, ...(curve.high || []), ...points.flatMap((row) => [row.p_measured, row.p_measured_high])];
  const xTop = (curve.first + curve.n.length) * DATA.bin_um;
  const sum = curve.n.reduce((a, b) => a + b, 0);
  const band = ` Band: ${LEVEL} interval.`;
  const ends = curve.p.map((p, i) => [p, i]).filter(([p]) => p !== null);
  const [near, far] = [ends[0], ends[ends.length - 1]];
  caption.textContent = `Line: median probability of all pairs, by bins of ${DATA.bin_um} µm, ${number(near[0])} near ${number(at(near[1]))} µm and ${number(far[0])} near ${number(at(far[1]))} µm; ${number(sum)} pairs.${band}${points.length ? ` Ink: ${points.length} recorded, with its window and 95 % interval (groups and lateral windows included).` : ""}`;
  const area = chart(plot, { xTop, yTop: Math.max(...values.filter((v) => v !== null), 0.001), xWords: "distance (µm)", yWords: "probability", label: caption.textContent, height: 200 });
  const { svg, x, y } = area;
  const known = curve.p.map((p, i) => i).filter((i) => curve.p[i] !== null);
  if (curve.low) {
    const banded = known.filter((i) => curve.low[i] !== null && curve.high[i] !== null);
    const up = banded.map((i) => [x(at(i)), y(curve.high[i])]);
    const down = banded.map((i) => [x(at(i)), y(curve.low[i])]).reverse();
    if (up.length) svg.append(draw("path", { class: `band ${tone}`, d: `${path([...up, ...down])}Z` }));
  }
  svg.append(draw("path", { class: `line-${tone}`, d: path(known.map((i) => [x(at(i)), y(curve.p[i])])) }));
  for (const i of known) svg.append(draw("circle", { class: tone, cx: x(at(i)), cy: y(curve.p[i]), r: 2.5 }));
  for (const row of points) {
    const low = Math.min(row.distance_low_um ?? 0, xTop), high = Math.min(row.distance_high_um ?? xTop, xTop);
    const middle = x((low + high) / 2);
    svg.append(draw("line", { class: "ink", x1: x(low), x2: x(high), y1: y(row.p_measured), y2: y(row.p_measured) }));
    if (row.p_measured_low !== null) svg.append(draw("line", { class: "ink", x1: middle, x2: middle, y1: y(row.p_measured_low), y2: y(row.p_measured_high) }));
    svg.append(draw("circle", { class: "ink", cx: middle, cy: y(row.p_measured), r: 4 }));
  }
}

figure(drawPathway);
