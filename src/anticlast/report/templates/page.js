"use strict";
/* Shared by the viewer, the map and the strips: the page's data, numbers as text, colours, and the place along the program. */
const page = (() => {
  const KINDS = { f4: Float32Array, f8: Float64Array, i2: Int16Array, i4: Int32Array, u1: Uint8Array, u2: Uint16Array, u4: Uint32Array };

  /* Base64 of little-endian numbers to a typed array. */
  function unpacked(entry) {
    const text = atob(entry.b);
    const bytes = new Uint8Array(text.length);
    for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
    return new KINDS[entry.t](bytes.buffer);
  }

  const data = JSON.parse(document.getElementById("data").textContent);
  const path = data.path;
  if (path) {
    for (const key of ["words", "tip", "axis", "line", "purpose", "operation", "tool", "clock"]) path[key] = unpacked(path[key]);
    for (const quantity of path.quantities) quantity.values = unpacked(quantity.values);
  }

  const RAPID = 5;

  function fixed(value, digits) {
    return Number.isFinite(value) ? value.toFixed(digits).replace("-", "\u2212") : "\u2013";
  }
  function length(mm) { return fixed(mm * data.units.scale, data.units.digits); }
  function small(mm) { return fixed(mm * data.units.small_scale, 2); }
  function clock(seconds) {
    const whole = Math.round(seconds);
    const two = (n) => String(n).padStart(2, "0");
    return `${Math.floor(whole / 3600)}:${two(Math.floor(whole / 60) % 60)}:${two(whole % 60)}`;
  }

  /* Light straw to dark blue: lightness falls all the way, so it reads in grey and with any colour vision. */
  const RAMP = [[246, 221, 132], [168, 203, 116], [80, 169, 138], [35, 121, 148], [36, 70, 130], [30, 22, 77]];
  function ramp(share) {
    const at = Math.min(Math.max(share, 0), 1) * (RAMP.length - 1);
    const low = Math.min(Math.floor(at), RAMP.length - 2);
    return RAMP[low].map((value, k) => value + (at - low) * (RAMP[low + 1][k] - value));
  }
  function css(rgb) { return `rgb(${rgb.map(Math.round).join(",")})`; }

  /* Kinds of move: colours told apart with any colour vision (Okabe and Ito, Color Universal Design, 2008), darkened. */
  const MOVES = {
    0: [0, 84, 148], 1: [110, 172, 214], 2: [196, 120, 0], 3: [0, 130, 96], 4: [150, 78, 126], 5: [176, 66, 0], 255: [70, 70, 70],
  };

  /* A vertical scale: strip of colour with the numbers beside it. */
  function scale(low, high, digits) {
    const box = document.createElement("div");
    box.className = "scale";
    const strip = document.createElement("canvas");
    strip.width = 1;
    strip.height = 128;
    const pen = strip.getContext("2d");
    for (let i = 0; i < 128; i++) {
      pen.fillStyle = css(ramp(1 - i / 127));
      pen.fillRect(0, i, 1, 1);
    }
    const marks = document.createElement("div");
    for (let i = 4; i >= 0; i--) {
      const mark = document.createElement("span");
      mark.textContent = fixed(low + (high - low) * i / 4, digits);
      marks.append(mark);
    }
    box.append(strip, marks);
    return box;
  }

  /* A key of colours (or patterns given as a drawing function) with words. */
  function keys(entries) {
    const list = document.createElement("ul");
    list.className = "keys";
    for (const [style, words, patch] of entries) {
      const item = document.createElement("li");
      const mark = document.createElement("i");
      if (patch) mark.className = "patch";
      mark.style.background = style;
      item.append(mark, words);
      list.append(item);
    }
    return list;
  }

  /* Canvas at the screen's own resolution; returns a pen that draws in CSS pixels. */
  function sheet(canvas, width, height) {
    const dense = Math.max(2, Math.min(3, window.devicePixelRatio || 1));
    canvas.style.height = `${height}px`;
    canvas.width = Math.round(width * dense);
    canvas.height = Math.round(height * dense);
    const pen = canvas.getContext("2d");
    pen.setTransform(dense, 0, 0, dense, 0, 0);
    return pen;
  }

  /* Program words of a row, as the control's read-out has them. */
  function words(row) {
    const k = path.letters.length;
    return path.letters.map((letter, c) => `${letter} ${fixed(path.words[row * k + c] / 10 ** path.decimals[c], path.decimals[c])}`).join("  ");
  }
  function quantity(key) { return path.quantities.find((entry) => entry.key === key); }
  function shown(entry, row) {
    const value = entry.values[row];
    return Number.isFinite(value) ? `${fixed(value, entry.digits)} ${entry.unit}`.trim() : "";
  }

  /* The place along the program: one row, with those who want to know. */
  const watchers = [];
  let at = 0;
  function go(row) {
    at = Math.min(Math.max(Math.round(row), 0), path.rows - 1);
    for (const watch of watchers) watch(at);
  }
  function rowOfLine(line) {
    let low = 0, high = path.rows - 1;
    while (low < high) { // first kept row at or after the line
      const middle = (low + high) >> 1;
      if (path.line[middle] < line) low = middle + 1; else high = middle;
    }
    return low;
  }
  /* The last of the rows on one line: the end of its block. */
  function endOfLine(line) {
    let row = rowOfLine(line);
    while (row + 1 < path.rows && path.line[row + 1] === path.line[row]) row++;
    return row;
  }

  return { data, path, unpacked, fixed, length, small, clock, ramp, css, MOVES, RAPID, scale, keys, sheet, words, quantity, shown,
    watch: (f) => watchers.push(f), go, get at() { return at; }, rowOfLine, endOfLine };
})();

/* Slider, line box and read-out; links from the checks to their line. */
(() => {
  const path = page.path;
  const byId = (id) => document.getElementById(id);
  if (!path) {
    for (const link of document.querySelectorAll(".to-line")) link.disabled = true;
    return;
  }
  const slider = byId("at"), line = byId("line"), out = byId("words");
  byId("scrubber").hidden = false;
  slider.max = path.rows - 1;
  if (!path.letters.length) line.closest("label").hidden = true;
  line.max = path.line[path.rows - 1];
  const notes = [...path.notes];
  if (path.of_rows > path.rows) {
    notes.unshift(`${path.rows} of ${path.of_rows} places along the motion are kept here; the drawn path stays within ${page.fixed(path.tolerance * page.data.units.scale, page.data.units.digits)} ${page.data.units.length} of the program's.`);
  }
  byId("path-note").textContent = notes.join(" ");

  page.watch((row) => {
    slider.value = row;
    if (document.activeElement !== line) line.value = path.line[row];
    const parts = [];
    if (path.letters.length) parts.push(`line ${path.line[row]}`, page.words(row));
    parts.push(`T${path.tool[row]}`, path.purposes[path.purpose[row]]);
    if (path.clock[path.rows - 1] > 0) parts.push(`at ${page.clock(path.clock[row])} of ${page.clock(path.clock[path.rows - 1])}`);
    const reached = page.shown(page.quantity("reached"), row);
    if (reached) parts.push(reached);
    const tilt = page.shown(page.quantity("tilt"), row);
    if (tilt) parts.push(`tilt ${tilt.replace(" °", "°")}`);
    const said = parts.join("   ");
    out.textContent = said;
    slider.setAttribute("aria-valuetext", said);
  });
  slider.addEventListener("input", () => page.go(Number(slider.value)));
  line.addEventListener("change", () => page.go(page.endOfLine(Number(line.value))));
  for (const button of document.querySelectorAll("[data-step]")) {
    button.addEventListener("click", () => page.go(page.at + Number(button.dataset.step)));
  }
  for (const link of document.querySelectorAll(".to-line")) {
    link.title = "move the cutter to this line";
    link.addEventListener("click", () => {
      page.go(page.endOfLine(Number(link.dataset.line)));
      byId("passes").scrollIntoView();
    });
  }
})();
