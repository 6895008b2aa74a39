// Axes, bars and curves.

function roundSteps(top, wanted) {
  if (!(top > 0)) return [0, 1];
  const rough = top / wanted;
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = [1, 2, 5, 10].map((f) => f * power).find((s) => s >= rough);
  const out = [];
  for (let i = 0; i === 0 || out[i - 1] < top * (1 - 1e-9); i += 1) out.push(Number((i * step).toPrecision(12)));
  return out;
}

// An empty chart: returns the svg and the functions from values to pixels.
function chart(host, { xTop, yTop, xWords, yWords, label, height = 170, xTicks = null }) {
  const width = Math.max(host.clientWidth, 220);
  const ySteps = roundSteps(yTop, 4);
  const left = 14 + Math.max(...ySteps.map((s) => textWidth(number(s))));
  const right = 14, top = 24, bottom = 38;
  const yEnd = ySteps[ySteps.length - 1];
  const xSteps = xTicks || roundSteps(xTop, Math.max(3, Math.floor((width - left) / 80)));
  const xEnd = xTicks ? xTop : Math.max(xTop, 1e-9);
  const x = (v) => left + ((width - left - right) * v) / xEnd;
  const y = (v) => height - bottom - ((height - bottom - top) * v) / yEnd;
  const svg = draw("svg", { width, height, role: "img", "aria-label": label });
  for (const step of ySteps) {
    svg.append(draw("line", { class: "grid", x1: left, x2: width - right, y1: y(step), y2: y(step) }));
    svg.append(draw("text", { x: left - 6, y: y(step) + 4, "text-anchor": "end" }, number(step)));
  }
  for (const step of xSteps.filter((s) => s <= xEnd * 1.0001)) {
    svg.append(draw("text", { x: x(step), y: height - bottom + 16, "text-anchor": "middle" }, number(step)));
  }
  svg.append(draw("text", { x: 0, y: 12 }, yWords));
  svg.append(draw("text", { x: (left + width - right) / 2, y: height - 4, "text-anchor": "middle" }, xWords));
  host.replaceChildren(svg);
  return { svg, x, y, xEnd, yEnd };
}

// Bars of counts; value of bar i is i * width, the last one may stand for "and more".
function bars(host, { counts, width = 1, offset = 0, whole = true, tone, xWords, yWords, label }) {
  const n = Math.max(counts.length, offset + 2);
  const shift = whole ? 0.5 : 0;
  const area = chart(host, {
    xTop: (n - offset) * width, yTop: Math.max(...counts, 4), xWords, yWords, label, xTicks: [],
  });
  const step = Math.max(1, Math.ceil((n - offset) / Math.max(3, (host.clientWidth - 60) / 44)));
  for (let i = offset; i < n; i += step) {
    const words = whole && i === DATA.most ? `${i}+` : number(i * width);
    area.svg.append(draw("text", { x: area.x((i - offset + shift) * width), y: area.y(0) + 16, "text-anchor": "middle" }, words));
  }
  counts.forEach((count, i) => {
    if (i < offset || !count) return;
    const left = area.x((i - offset) * width) + 1, right = area.x((i - offset + 1) * width) - 1;
    area.svg.append(draw("rect", { class: tone, x: left, width: Math.max(right - left, 1), y: area.y(count), height: Math.max(area.y(0) - area.y(count), 1) }));
  });
  return area;
}

function path(points) {
  return points.map(([x, y], i) => `${i ? "L" : "M"}${x.toFixed(1)} ${y.toFixed(1)}`).join("");
}

// Seven stops of the cividis map (Nunez, Anderton & Renslow 2018), dark to bright.
const SHADES = [[0, 34, 78], [42, 63, 109], [87, 93, 109], [125, 124, 120], [165, 156, 116], [210, 192, 96], [254, 232, 56]];

function shade(part) {
  const at = Math.min(Math.max(part, 0), 1) * (SHADES.length - 1);
  const low = Math.min(Math.floor(at), SHADES.length - 2);
  const mix = SHADES[low].map((v, i) => Math.round(v + (SHADES[low + 1][i] - v) * (at - low)));
  return `rgb(${mix.join(",")})`;
}

function mean(counts, first = 0) {
  let sum = 0, n = 0;
  counts.forEach((count, i) => { if (i >= first) { sum += count * i; n += count; } });
  return n ? sum / n : null;
}
