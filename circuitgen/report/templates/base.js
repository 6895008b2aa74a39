// What every figure needs: the data, elements made from plain text, numbers, CSV links.
const DATA = JSON.parse(document.getElementById("report-data").textContent);
const TYPES = DATA.types;
const LEVEL = "90 %";
const FIGURES = []; // functions that draw into the width they find
const CSV = {}; // name -> function that returns rows of values, the header first

function byId(id) { return document.getElementById(id); }

function fill(node, attributes, children) {
  for (const [key, value] of Object.entries(attributes || {})) {
    if (value !== null && value !== undefined) node.setAttribute(key, value);
  }
  for (const child of [].concat(children ?? [])) {
    node.append(child instanceof Node ? child : String(child));
  }
  return node;
}

function make(tag, attributes, children) {
  return fill(document.createElement(tag), attributes, children);
}

function draw(tag, attributes, children) {
  return fill(document.createElementNS("http://www.w3.org/2000/svg", tag), attributes, children);
}

function number(value, digits = 3) {
  if (value === null || value === undefined) return "–";
  if (Number.isInteger(value)) return value.toLocaleString("en-US");
  const rounded = Number(value.toPrecision(digits));
  if (Math.abs(rounded) >= 1000) return Math.round(rounded).toLocaleString("en-US");
  return rounded.toLocaleString("en-US", { maximumFractionDigits: 12, useGrouping: false });
}

function signOf(type) { return TYPES[type].excitatory ? "exc" : "inh"; }

function pathwayName(code) {
  const n = TYPES.length;
  return `${TYPES[Math.floor(code / n)].name} → ${TYPES[code % n].name}`;
}

// Width in pixels that a text of 12 px takes, for cutting labels that are too long.
const RULER = document.createElement("canvas").getContext("2d");
RULER.font = "12px system-ui, 'Segoe UI', 'Noto Sans', sans-serif";

function textWidth(text) { return RULER.measureText(text).width; }

function cut(text, room) {
  if (textWidth(text) <= room) return text;
  const letters = Array.from(text);
  while (letters.length > 1 && textWidth(`${letters.join("")}…`) > room) letters.pop();
  return `${letters.join("")}…`;
}

function csvText(rows) {
  const field = (value) => {
    if (value === null || value === undefined) return "";
    if (typeof value !== "string") return String(value);
    return `"${value.replace(/"/g, '""')}"`;
  };
  return rows.map((row) => row.map(field).join(",")).join("\n") + "\n";
}

// A link whose file is made from the page's own data when it is followed.
function csvLink(name, rows) {
  const link = make("a", { href: "#", download: `${name}.csv` }, "data as CSV");
  link.addEventListener("click", () => {
    const blob = new Blob([csvText(rows())], { type: "text/csv" });
    if (link.href.startsWith("blob:")) URL.revokeObjectURL(link.href);
    link.href = URL.createObjectURL(blob);
  });
  return link;
}

function rowsOf(objects) {
  if (!objects.length) return [[]];
  const keys = Object.keys(objects[0]);
  return [keys, ...objects.map((one) => keys.map((key) => one[key]))];
}

function figure(redraw) { FIGURES.push(redraw); }

function drawFigures() { for (const redraw of FIGURES) redraw(); }
