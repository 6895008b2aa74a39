// A connected pair in space: axon of the one, dendrites of the other, synapses marked.
const PAIR = (function pair() {
  const host = byId("pair-view"), words = byId("pair-words");
  const pairs = DATA.shown_pairs;
  CSV.pair = () => [["pair", "pre_cell_id", "post_cell_id", "x_um", "y_um", "z_um", "axon_path_um", "dendrite_path_um", "delay_ms"], ...pairs.flatMap((p, i) => p.synapses.map((s) => [i + 1, p.pre.cell_id, p.post.cell_id, ...s.at, s.axon_path_um, s.dendrite_path_um, s.delay_ms]))];
  if (!pairs.length) {
    host.remove();
    byId("pair-picker").remove();
    words.textContent = "Not drawn: the circuit has no connection, or the reconstructions that it was built from are gone, were changed, or share a name.";
    return { angles: () => null };
  }
  const canvas = make("canvas", { role: "img" });
  host.append(canvas);
  const home = () => ({ turn: 0.5, tilt: 0.12, zoom: 1 });
  let chosen = 0, view = home(), asked = false;

  const title = (p) => `${TYPES[p.pre.type].name} → ${TYPES[p.post.type].name}`;
  const select = make("select", { id: "pair-choice" }, pairs.map((p, i) => make("option", { value: i }, `${cut(TYPES[p.pre.type].name, 120)} → ${cut(TYPES[p.post.type].name, 120)}`)));
  select.addEventListener("change", () => { chosen = Number(select.value); view = home(); tell(); render(); });
  const button = (text, change) => {
    const one = make("button", { type: "button" }, text);
    one.addEventListener("click", () => { change(); ask(); });
    return one;
  };
  byId("pair-picker").append(
    make("label", {}, ["Pair", select]),
    button("turn left", () => { view.turn -= 0.26; }), button("turn right", () => { view.turn += 0.26; }),
    button("nearer", () => { view.zoom *= 1.25; }), button("farther", () => { view.zoom /= 1.25; }),
    button("as at first", () => { view = home(); }),
  );

  function tell() {
    const p = pairs[chosen];
    const list = p.synapses.map((s) => `${number(s.axon_path_um)} µm along the axon and ${number(s.dendrite_path_um)} µm along the target, ${number(s.delay_ms)} ms`).join("; ");
    words.textContent = `${title(p)}: cell ${p.pre.cell_id} to cell ${p.post.cell_id}, somata ${number(p.distance_um)} µm apart, ${p.synapses.length} synapses, marked as numbered brick squares: ${list}. A typical pair: the class's mean number of synapses, near its median distance. Presynaptic cell: axon plum, dendrites faint; postsynaptic cell: dendrites moss, axon left out. Drag, or focus the figure and use the arrow keys, + and −.`;
    canvas.setAttribute("aria-label", words.textContent);
    host.setAttribute("aria-label", `${title(p)} in space; arrow keys turn it`);
  }

  function bounds(p) {
    const xyz = [[], [], []];
    const take = (lines, wanted) => { for (const [kind, q] of lines) if (wanted(kind)) q.forEach((v, i) => xyz[i % 3].push(v)); };
    take(p.pre.lines, () => true);
    take(p.post.lines, (kind) => kind !== 2);
    const ends = xyz.map((v) => [v.reduce((a, b) => Math.min(a, b)), v.reduce((a, b) => Math.max(a, b))]);
    return { middle: ends.map(([a, b]) => (a + b) / 2), size: Math.hypot(...ends.map(([a, b]) => b - a)), spread: ends.map(([a, b]) => b - a) };
  }

  function render() {
    asked = false;
    const p = pairs[chosen], { middle, spread } = bounds(p);
    const width = Math.max(host.clientWidth, 240), height = Math.round(Math.min(Math.max(width * 0.72, 300), 640));
    const ratio = window.devicePixelRatio || 1;
    fill(canvas, { width: width * ratio, height: height * ratio });
    canvas.style.height = `${height}px`;
    const pen = canvas.getContext("2d");
    pen.setTransform(ratio, 0, 0, ratio, 0, 0);
    const colours = getComputedStyle(document.documentElement);
    const colour = (name) => colours.getPropertyValue(`--${name}`).trim();
    const scale = view.zoom * Math.min((width - 40) / Math.max(Math.hypot(spread[0], spread[1]), 1), (height - 40) / Math.max(spread[2], 1));
    const [c, s, ct, st] = [Math.cos(view.turn), Math.sin(view.turn), Math.cos(view.tilt), Math.sin(view.tilt)];
    const project = (x, y, z) => {
      const [a, b, h] = [x - middle[0], y - middle[1], z - middle[2]];
      const right = c * a - s * b, away = s * a + c * b;
      return [width / 2 + right * scale, height / 2 - (h * ct - away * st) * scale];
    };
    const lines = (own, wanted, name, thick, alpha) => {
      pen.strokeStyle = colour(name); pen.lineWidth = thick; pen.globalAlpha = alpha; pen.lineJoin = "round";
      pen.beginPath();
      for (const [kind, q] of own) {
        if (!wanted(kind)) continue;
        for (let i = 0; i < q.length; i += 3) {
          const [x, y] = project(q[i], q[i + 1], q[i + 2]);
          if (i) pen.lineTo(x, y); else pen.moveTo(x, y);
        }
      }
      pen.stroke();
      pen.globalAlpha = 1;
    };
    lines(p.pre.lines, (kind) => kind !== 2, "dendrite", 1.2, 0.35);
    lines(p.post.lines, (kind) => kind !== 2, "dendrite", 2.2, 1);
    lines(p.pre.lines, (kind) => kind === 2, "axon", 1.2, 1);
    somata(pen, p, project, scale, colour);
    p.synapses.forEach((one, i) => {
      const [x, y] = project(...one.at);
      pen.fillStyle = colour("brick"); pen.strokeStyle = colour("paper"); pen.lineWidth = 1.5;
      pen.beginPath(); pen.rect(x - 5, y - 5, 10, 10); pen.fill(); pen.stroke();
    });
    // Numbers stand away from the middle of all synapses, so that near ones stay legible.
    const places = p.synapses.map((one) => project(...one.at));
    const centre = [0, 1].map((k) => places.reduce((sum, q) => sum + q[k], 0) / places.length);
    const marks = []; // synapses that lie on each other here share their numbers
    places.forEach(([x, y], i) => {
      const mark = marks.find((one) => Math.hypot(one.x - x, one.y - y) < 12);
      if (mark) mark.text += `, ${i + 1}`;
      else marks.push({ x, y, text: String(i + 1) });
    });
    for (const { x, y, text } of marks) {
      const angle = places.length > 1 ? Math.atan2(y - centre[1], x - centre[0]) : -0.8;
      const left = Math.cos(angle) < 0 ? pen.measureText(text).width : 0;
      label(pen, text, x + 12 * Math.cos(angle) - left, y + 16 * Math.sin(angle) + 5, colour);
    }
    const bar = roundSteps((width * 0.14) / scale, 1)[1];
    pen.fillStyle = colour("ink");
    pen.fillRect(12, height - 14, bar * scale, 2);
    label(pen, `${number(bar)} µm`, 12, height - 20, colour);
  }

  function label(pen, text, x, y, colour) {
    pen.font = "600 13px system-ui, sans-serif";
    pen.lineWidth = 3; pen.strokeStyle = colour("panel"); pen.strokeText(text, x, y);
    pen.fillStyle = colour("ink"); pen.fillText(text, x, y);
  }

  function somata(pen, p, project, scale, colour) {
    // Words stand in the margin, with a line to their soma, clear of cables and synapses.
    const places = [[p.pre, "pre"], [p.post, "post"]].map(([one, word]) => [one, word, ...project(...one.soma)]);
    const crowded = Math.abs(places[0][3] - places[1][3]) < 18;
    for (const [one, word, x, y] of places) {
      const level = y + (crowded ? (one === p.pre ? 9 : -9) : 0);
      pen.beginPath(); pen.moveTo(44, level); pen.lineTo(x, y);
      pen.strokeStyle = colour("soft"); pen.lineWidth = 0.8; pen.stroke();
      label(pen, word, 10, level + 4, colour);
      pen.beginPath(); pen.arc(x, y, Math.max(4, one.soma_radius_um * scale), 0, 7);
      pen.fillStyle = colour(signOf(one.type)); pen.strokeStyle = colour("ink"); pen.lineWidth = 1.5;
      pen.fill(); pen.stroke();
    }
  }

  function ask() { if (!asked) { asked = true; requestAnimationFrame(render); } }

  let held = null;
  host.addEventListener("pointerdown", (event) => { held = [event.clientX, event.clientY]; host.setPointerCapture(event.pointerId); });
  host.addEventListener("pointermove", (event) => {
    if (!held) return;
    view.turn += (event.clientX - held[0]) * 0.01;
    view.tilt = Math.min(Math.max(view.tilt + (event.clientY - held[1]) * 0.01, -1.57), 1.57);
    held = [event.clientX, event.clientY];
    ask();
  });
  for (const end of ["pointerup", "pointercancel"]) host.addEventListener(end, () => { held = null; });
  host.addEventListener("keydown", (event) => {
    const step = {
      ArrowLeft: () => { view.turn -= 0.09; }, ArrowRight: () => { view.turn += 0.09; },
      ArrowUp: () => { view.tilt = Math.min(view.tilt + 0.09, 1.57); }, ArrowDown: () => { view.tilt = Math.max(view.tilt - 0.09, -1.57); },
      "+": () => { view.zoom *= 1.1; }, "-": () => { view.zoom /= 1.1; },
    }[event.key];
    if (!step) return;
    event.preventDefault();
    step();
    ask();
  });
  tell();
  figure(render);
  return { angles: () => [view.turn, view.tilt] };
})();
