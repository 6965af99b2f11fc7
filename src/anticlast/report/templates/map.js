/* Plan view of the residual height that was measured: colour by height, hatching where a limit is broken. */
(() => {
  const map = page.data.map;
  if (!map) return;
  const byId = (id) => document.getElementById(id);
  const canvas = byId("heights"), out = byId("spot");
  byId("map-box").hidden = false;
  byId("map-note").hidden = true;
  const high = page.unpacked(map.high), low = page.unpacked(map.low);
  const NONE = -32768;
  const unit = page.data.units;
  const bad = map.allowed === null ? Infinity : map.allowed;

  /* One picture of a pixel a cell, y up; broken limits get their own flat colour here and hatching later. */
  const GOUGE = [196, 0, 110], OVER = [222, 92, 0];
  const picture = document.createElement("canvas");
  picture.width = map.nx;
  picture.height = map.ny;
  const gouged = [], over = [];
  {
    const pen = picture.getContext("2d");
    const image = pen.createImageData(map.nx, map.ny);
    for (let j = 0; j < map.ny; j++) {
      for (let i = 0; i < map.nx; i++) {
        const cell = j * map.nx + i;
        if (high[cell] === NONE) continue;
        const top = high[cell] * map.step - map.wanted, bottom = low[cell] * map.step;
        let rgb = page.ramp(top / map.top);
        if (bottom < -map.gouge) { rgb = GOUGE; gouged.push([i, j]); }
        else if (top > bad) { rgb = OVER; over.push([i, j]); }
        image.data.set([...rgb, 255], 4 * ((map.ny - 1 - j) * map.nx + i));
      }
    }
    pen.putImageData(image, 0, 0);
  }

  /* Diagonal stripes, so that broken limits show without colour; "/" for a gouge, "\" for too high. */
  function hatch(colour, falling) {
    const tile = document.createElement("canvas");
    tile.width = tile.height = 12;
    const pen = tile.getContext("2d");
    pen.fillStyle = colour;
    pen.fillRect(0, 0, 12, 12);
    pen.strokeStyle = "#fff";
    pen.lineWidth = 3;
    pen.beginPath();
    for (const shift of [-12, 0, 12]) {
      if (falling) { pen.moveTo(shift, -1); pen.lineTo(shift + 14, 13); }
      else { pen.moveTo(shift + 13, -1); pen.lineTo(shift - 1, 13); }
    }
    pen.stroke();
    return tile;
  }
  const tiles = { gouge: hatch(page.css(GOUGE), false), over: hatch(page.css(OVER), true) };

  let scale = 1, left = 0, top = 0, cursor = null;
  const x0 = map.x0 - map.dx / 2, x1 = x0 + map.nx * map.dx, y0 = map.y0 - map.dy / 2, y1 = y0 + map.ny * map.dy;
  const toX = (x) => left + (x - x0) * scale, toY = (y) => top + (y1 - y) * scale;

  function rulers(pen, height) {
    const span = Math.max(x1 - x0, y1 - y0) * unit.scale;
    const power = 10 ** Math.floor(Math.log10(span / 5));
    const step = [1, 2, 5, 10].map((k) => k * power).find((size) => span / size <= 8);
    const digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
    pen.fillStyle = pen.strokeStyle = "#1b2430";
    pen.lineWidth = 1;
    pen.font = "13px system-ui, sans-serif";
    pen.beginPath();
    pen.textAlign = "center";
    for (let k = Math.ceil(x0 * unit.scale / step); k * step <= x1 * unit.scale; k++) {
      const x = toX(k * step / unit.scale);
      if (x < left + 12) continue; // leaves room for the name of the axis
      pen.moveTo(x, height - 22);
      pen.lineTo(x, height - 16);
      pen.fillText(page.fixed(k * step, digits), x, height - 3);
    }
    pen.textAlign = "right";
    for (let k = Math.ceil(y0 * unit.scale / step); k * step <= y1 * unit.scale; k++) {
      const y = toY(k * step / unit.scale);
      pen.moveTo(left - 8, y);
      pen.lineTo(left - 2, y);
      pen.fillText(page.fixed(k * step, digits), left - 11, y + 4);
    }
    pen.stroke();
    pen.textAlign = "left";
    pen.fillText(`Y, ${unit.length}`, 2, 12);
    pen.fillText(`X, ${unit.length}`, 2, height - 3);
  }

  function draw() {
    const width = canvas.clientWidth;
    left = 46;
    top = 20;
    scale = Math.min((width - left - 8) / (x1 - x0), 640 / (y1 - y0));
    const height = top + (y1 - y0) * scale + 24;
    const pen = page.sheet(canvas, width, height);
    pen.fillStyle = "#fff";
    pen.fillRect(0, 0, width, height);
    pen.imageSmoothingEnabled = false;
    pen.drawImage(picture, left, top, (x1 - x0) * scale, (y1 - y0) * scale);
    for (const [cells, tile] of [[gouged, tiles.gouge], [over, tiles.over]]) {
      pen.fillStyle = pen.createPattern(tile, "repeat");
      const w = map.dx * scale, h = map.dy * scale;
      for (const [i, j] of cells) pen.fillRect(toX(x0 + i * map.dx), toY(y0 + (j + 1) * map.dy), w + 0.4, h + 0.4);
    }
    pen.strokeStyle = "#1b2430";
    pen.lineWidth = 1.5;
    for (const ring of page.data.outline) {
      pen.beginPath();
      ring.forEach(([x, y], k) => (k ? pen.lineTo(toX(x), toY(y)) : pen.moveTo(toX(x), toY(y))));
      pen.closePath();
      pen.stroke();
    }
    pen.beginPath(); // program zero
    pen.strokeStyle = "#1b2430";
    pen.moveTo(toX(0) - 7, toY(0));
    pen.lineTo(toX(0) + 7, toY(0));
    pen.moveTo(toX(0), toY(0) - 7);
    pen.lineTo(toX(0), toY(0) + 7);
    pen.stroke();
    ring(pen, map.worst[0], map.worst[1], 8);
    rulers(pen, height);
    if (cursor) {
      pen.beginPath();
      pen.strokeStyle = "#fff";
      pen.lineWidth = 4;
      pen.rect(toX(cursor[0]) - 6, toY(cursor[1]) - 6, 12, 12);
      pen.stroke();
      pen.strokeStyle = "#1b2430";
      pen.lineWidth = 2;
      pen.stroke();
    }
  }
  function ring(pen, x, y, size) {
    for (const [colour, wide] of [["#fff", 5], ["#1b2430", 2]]) {
      pen.beginPath();
      pen.strokeStyle = colour;
      pen.lineWidth = wide;
      pen.arc(toX(x), toY(y), size, 0, 2 * Math.PI);
      pen.stroke();
    }
  }

  /* ---- reading a height ---- */
  function read(x, y) {
    const i = Math.floor((x - x0) / map.dx), j = Math.floor((y - y0) / map.dy);
    cursor = [x, y];
    const where = `X ${page.length(x)}  Y ${page.length(y)} ${unit.length}`;
    const cell = j * map.nx + i;
    if (i < 0 || j < 0 || i >= map.nx || j >= map.ny || high[cell] === NONE) {
      out.textContent = `${where}   outside the outline`;
    } else {
      const most = high[cell] * map.step - map.wanted, least = low[cell] * map.step - map.wanted;
      const word = least + map.wanted < -map.gouge ? "   GOUGE" : most > bad ? "   OVER THE LIMIT" : "";
      out.textContent = `${where}   highest ${page.small(most)} ${unit.small}, lowest ${page.small(least)} ${unit.small}${word}`;
    }
    draw();
  }
  function point(event) {
    const box = canvas.getBoundingClientRect();
    read(x0 + (event.clientX - box.left - left) / scale, y1 - (event.clientY - box.top - top) / scale);
  }
  canvas.addEventListener("pointermove", point);
  canvas.addEventListener("pointerdown", point);
  canvas.addEventListener("keydown", (event) => {
    const step = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] }[event.key];
    if (!step) return;
    event.preventDefault();
    const [x, y] = cursor || [0, 0];
    const wide = event.shiftKey ? 10 : 1;
    read(Math.min(Math.max(x + wide * step[0] * map.dx, x0), x1), Math.min(Math.max(y + wide * step[1] * map.dy, y0), y1));
  });

  /* ---- legend ---- */
  {
    const box = byId("map-legend");
    const title = document.createElement("strong");
    title.textContent = `height, ${unit.small}`;
    const entries = [];
    if (map.limit !== null) entries.push([`url(${tiles.over.toDataURL()})`, `over the limit of ${page.small(map.limit)} ${unit.small}${over.length ? "" : ": nowhere"}`, true]);
    entries.push([`url(${tiles.gouge.toDataURL()})`, `gouge, deeper than ${page.small(map.gouge)} ${unit.small}${gouged.length ? "" : ": nowhere"}`, true]);
    const scaleBox = page.scale(0, map.top * unit.small_scale, 2);
    if (map.limit !== null) scaleBox.querySelector("span").textContent += " limit";
    const worst = document.createElement("p");
    worst.className = "quiet";
    worst.textContent = `Ring: highest scallop. Cross: program zero. Cells of ${page.length(map.dx)} ${unit.length} show the worst height in them.`;
    box.append(title, scaleBox, page.keys(entries), worst);
  }
  new ResizeObserver(draw).observe(canvas.parentElement);
  draw();
})();
