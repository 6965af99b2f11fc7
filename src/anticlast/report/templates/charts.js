/* Strips along the program: feed, rotary words, stepover, scallop; one common scale of program lines. */
(() => {
  const path = page.path;
  if (!path || path.rows < 2) return;
  const byId = (id) => document.getElementById(id);
  const canvas = byId("chart"), out = byId("chart-words");
  byId("strips-box").hidden = false;
  byId("strips-note").hidden = true;
  const limit = page.data.map && page.data.map.limit !== null ? page.data.map.limit * page.data.units.small_scale : null;

  const byLine = path.letters.length > 0;
  const place = byLine ? path.line : Uint32Array.from({ length: path.rows }, (_, i) => i);
  const first = byLine ? path.line[1] : 0;
  const last = place[path.rows - 1];
  const what = byLine ? "program line" : "point of the plan";

  /* ---- the strips ---- */
  const strips = [];
  const any = (values) => values.some(Number.isFinite);
  const [reached, asked] = ["reached", "asked"].map(page.quantity);
  if (any(asked.values)) {
    // What the job asks for, what F in the program asks for (slower where an axis could not follow), what is reached.
    const wanted = Float32Array.from({ length: path.rows }, (_, i) => (Number.isFinite(asked.values[i]) && path.operation[i] >= 0 ? path.feeds[path.operation[i]] : NaN));
    const lines = [
      { name: "job", values: wanted, style: "#4b5a1c", dash: [2, 2] },
      { name: "program", values: asked.values, style: "#b04200", dash: [5, 3] },
    ];
    if (any(reached.values)) lines.push({ name: "reached", values: reached.values, style: "#0b4f7d" });
    strips.push({ title: "contact feed", unit: asked.unit, digits: asked.digits, lines, zero: true });
  }
  const k = path.letters.length;
  const STYLES = [["#0b4f7d", []], ["#b04200", [6, 3]], ["#4b5a1c", [2, 2]]];
  const rotary = path.letters.map((letter, c) => [letter, c]).filter(([letter]) => "ABC".includes(letter));
  rotary.forEach(([letter, c], n) => {
    const values = Float32Array.from({ length: path.rows }, (_, i) => path.words[i * k + c] / 10 ** path.decimals[c]);
    strips.push({ title: `${letter} word`, unit: "\u00b0", digits: 2, lines: [{ name: letter, values, style: STYLES[n % 3][0] }] });
  });
  for (const [key, mark] of [["stepover", null], ["scallop", limit]]) {
    const entry = page.quantity(key);
    if (!any(entry.values)) continue;
    strips.push({ title: entry.title, unit: entry.unit, digits: entry.digits, lines: [{ name: entry.title, values: entry.values, style: "#0b4f7d", dots: true }], mark, zero: key === "scallop" });
  }

  const LEFT = 68, RIGHT = 10, TALL = 96, GAP = 30, FOOT = 34;
  let low = first, high = last, rows = [0, path.rows - 1], hover = null, lift = 0;

  function lowest(line) { return byLine ? page.rowOfLine(line) : Math.ceil(line); }

  /* Range of values in the rows shown; a flat line gets some air. */
  function range(strip, from, to) {
    let least = strip.zero ? 0 : Infinity, most = strip.mark || -Infinity;
    for (const { values } of strip.lines) {
      for (let i = from; i <= to; i++) {
        const value = values[i];
        if (!Number.isFinite(value)) continue;
        if (value < least) least = value;
        if (value > most) most = value;
      }
    }
    if (!(least <= most)) return null;
    const air = 0.08 * (most - least) || Math.abs(most) * 0.02 || 1;
    return { low: strip.zero ? 0 : least - air, high: most + air, least, most };
  }

  function draw() {
    const width = canvas.clientWidth;
    lift = width < 480 && strips.length && strips[0].lines.length > 1 ? 18 : 0; // the key gets its own line on a phone
    const height = strips.length * (TALL + GAP) + FOOT + lift;
    const pen = page.sheet(canvas, width, height);
    pen.fillStyle = "#fff";
    pen.fillRect(0, 0, width, height);
    rows = [Math.max(lowest(low) - 1, 0), Math.min(lowest(high) + 1, path.rows - 1)];
    const toX = (line) => LEFT + (line - low) / Math.max(high - low, 1) * (width - LEFT - RIGHT);
    pen.font = "13px system-ui, sans-serif";
    strips.forEach((strip, n) => {
      const top = n * (TALL + GAP) + GAP - 6 + lift;
      frame(pen, strip, top, width, toX);
    });
    ruler(pen, width, height, toX);
    for (const [row, style] of [[page.at, "#8c1c13"], [hover, "#566273"]]) {
      if (row === null || place[row] < low || place[row] > high) continue;
      pen.strokeStyle = style;
      pen.lineWidth = 1.5;
      pen.beginPath();
      pen.moveTo(toX(place[row]), GAP - 6 + lift);
      pen.lineTo(toX(place[row]), height - FOOT);
      pen.stroke();
    }
  }

  function frame(pen, strip, top, width, toX) {
    pen.fillStyle = "#1b2430";
    pen.textAlign = "left";
    const title = strip.unit ? `${strip.title}, ${strip.unit}` : strip.title;
    const keyed = strip.lines.length > 1;
    pen.fillText(title, LEFT, top - 7 - (keyed ? lift : 0));
    const [gap, sample] = lift ? [12, 14] : [22, 24];
    let x = LEFT + (lift ? 0 : pen.measureText(title).width + gap);
    if (keyed) {
      for (const line of strip.lines) {
        stroke(pen, line);
        pen.beginPath();
        pen.moveTo(x, top - 11);
        pen.lineTo(x + sample, top - 11);
        pen.stroke();
        pen.setLineDash([]);
        pen.fillText(line.name, x + sample + 5, top - 7);
        x += sample + 5 + gap + pen.measureText(line.name).width;
      }
    }
    pen.strokeStyle = "#c3cad2";
    pen.lineWidth = 1;
    pen.strokeRect(LEFT, top, width - LEFT - RIGHT, TALL);
    const ends = range(strip, rows[0], rows[1]);
    pen.textAlign = "right";
    if (!ends) {
      pen.textAlign = "left";
      pen.fillText("nothing here", LEFT + 8, top + TALL / 2);
      return;
    }
    const toY = (value) => top + TALL - (value - ends.low) / (ends.high - ends.low) * TALL;
    for (const value of new Set([ends.least, ends.most])) pen.fillText(page.fixed(value, strip.digits), LEFT - 6, toY(value) + 4);
    pen.save();
    pen.beginPath();
    pen.rect(LEFT, top, width - LEFT - RIGHT, TALL);
    pen.clip();
    for (const line of strip.lines) curve(pen, line, toX, toY);
    pen.restore();
    if (strip.mark !== null && strip.mark !== undefined && strip.mark <= ends.high) {
      pen.strokeStyle = "#8c1c13";
      pen.setLineDash([8, 4]);
      pen.beginPath();
      pen.moveTo(LEFT, toY(strip.mark));
      pen.lineTo(width - RIGHT, toY(strip.mark));
      pen.stroke();
      pen.setLineDash([]);
      const words = `limit ${page.fixed(strip.mark, strip.digits)}`;
      pen.fillStyle = "#8c1c13";
      pen.fillText(words, width - RIGHT, top - 7); // above the frame, clear of the curve
    }
  }
  function stroke(pen, line) {
    pen.strokeStyle = line.style;
    pen.lineWidth = 1.3;
    pen.setLineDash(line.dash || []);
  }

  /* At most one upright bar a pixel column from least to most, joined; gaps where there is no value. */
  function curve(pen, line, toX, toY) {
    stroke(pen, line);
    const crowded = rows[1] - rows[0] > 2 * canvas.clientWidth;
    if (crowded) pen.setLineDash([]);
    pen.beginPath();
    let column = NaN, least = 0, most = 0, open = false;
    const close = () => {
      if (Number.isNaN(column)) return;
      if (open) pen.lineTo(column, toY(least)); else pen.moveTo(column, toY(least));
      pen.lineTo(column, toY(most) - 0.6);
      open = true;
    };
    for (let i = rows[0]; i <= rows[1]; i++) {
      const value = line.values[i];
      if (!Number.isFinite(value)) {
        close();
        column = NaN;
        open = false;
        continue;
      }
      const x = crowded ? Math.round(toX(place[i])) : toX(place[i]);
      if (x === column) {
        least = Math.min(least, value);
        most = Math.max(most, value);
      } else {
        close();
        column = x;
        least = most = value;
      }
    }
    close();
    pen.stroke();
    pen.setLineDash([]);
  }

  function ruler(pen, width, height, toX) {
    const span = high - low || 1;
    const power = 10 ** Math.floor(Math.log10(span / 4));
    const most = Math.max(4, Math.floor((width - LEFT) / 90));
    const step = Math.max(1, [1, 2, 5, 10].map((m) => m * power).find((size) => span / size <= most) || span);
    pen.fillStyle = pen.strokeStyle = "#1b2430";
    pen.textAlign = "center";
    pen.lineWidth = 1;
    pen.beginPath();
    for (let line = Math.ceil(low / step) * step; line <= high; line += step) {
      pen.moveTo(toX(line), height - FOOT);
      pen.lineTo(toX(line), height - FOOT + 5);
      pen.fillText(String(line), Math.min(toX(line), width - 24), height - FOOT + 18);
    }
    pen.stroke();
    pen.textAlign = "left";
    pen.fillText(what, 0, height - 2);
  }

  /* ---- pointing, moving, zooming ---- */
  function rowAt(event) {
    const box = canvas.getBoundingClientRect();
    const share = (event.clientX - box.left - LEFT) / (box.width - LEFT - RIGHT);
    return Math.min(lowest(Math.round(low + Math.min(Math.max(share, 0), 1) * (high - low))), path.rows - 1);
  }
  function say(row) {
    const parts = [`${byLine ? "line" : "point"} ${place[row]}`];
    for (const strip of strips) {
      for (const line of strip.lines) {
        const value = line.values[row];
        if (Number.isFinite(value)) parts.push(`${strip.lines.length > 1 ? `feed ${line.name}` : line.name} ${page.fixed(value, strip.digits)} ${strip.unit}`);
      }
    }
    out.textContent = parts.join("   ");
  }
  canvas.addEventListener("pointermove", (event) => { hover = rowAt(event); say(hover); draw(); });
  canvas.addEventListener("pointerleave", () => { hover = null; draw(); });
  canvas.addEventListener("click", (event) => { const row = rowAt(event); page.go(row); say(row); });
  canvas.addEventListener("keydown", (event) => {
    const step = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    if (!step) return;
    event.preventDefault();
    page.go(page.at + step * (event.shiftKey ? 20 : 1));
    say(page.at);
  });
  function show(middle, span) {
    const wide = Math.min(Math.max(span, 20), last - first);
    low = Math.min(Math.max(Math.round(middle - wide / 2), first), last - wide);
    high = low + wide;
    draw();
  }
  for (const button of document.querySelectorAll("[data-zoom]")) {
    button.addEventListener("click", () => {
      const turn = Number(button.dataset.zoom);
      if (turn === 0) { low = first; high = last; draw(); return; }
      const here = place[page.at] >= low && place[page.at] <= high ? place[page.at] : (low + high) / 2;
      show(turn > 0 ? here : (low + high) / 2, turn > 0 ? (high - low) / 5 : (high - low) * 5);
    });
  }
  for (const button of document.querySelectorAll("[data-shift]")) {
    button.addEventListener("click", () => show((low + high) / 2 + Number(button.dataset.shift) * (high - low) * 0.8, high - low));
  }
  page.watch(draw);
  new ResizeObserver(draw).observe(canvas.parentElement);
  draw();
})();

/* Start at a cut a third of the way, so that the cutter stands on the part. */
if (page.path) {
  const third = Math.round(page.path.rows / 3);
  page.go(Math.max(page.path.purpose.indexOf(0, third), 0));
}
