/* The stock preview: one place along the program; plan, solid view and strip follow it. */
(() => {
  const stock = page.data.stock, { unpacked, fixed, length, ramp, css } = page;
  const unit = page.data.units.length, byId = (id) => document.getElementById(id);
  for (const key of ["places_xy", "there", "top", "surface", "cosine", "tip", "axis", "line", "tool", "rapid", "operation", "pass", "clock"]) stock[key] = unpacked(stock[key]);
  const drops = stock.drops, grid = stock.grid, cells = grid.rows * grid.columns;
  for (const key of ["cell", "top", "place", "line"]) drops[key] = unpacked(drops[key]);
  for (const load of stock.loads) { load.values = unpacked(load.values); if (load.low) load.low = unpacked(load.low); }
  const last = Math.max(stock.places - 1, 0);

  /* ---- the stock at a place: the blank's columns, and every drop up to there ---- */
  const top = Float32Array.from(stock.top);
  let done = 0, at = 0;
  function cutTo(place) {
    if (done > 0 && drops.place[done - 1] > place) { top.set(stock.top); done = 0; }
    while (done < drops.cell.length && drops.place[done] <= place) { top[drops.cell[done]] = drops.top[done]; done++; }
  }
  const gone = (i) => top[i] <= stock.bottom + 1e-4;
  const thickness = (i) => (top[i] - stock.surface[i]) * stock.cosine[i];

  const WOOD = [205, 196, 176], LOW = [190, 30, 45], NONE = [238, 241, 244], LOW_MM = -0.05;
  let span = 1;
  function colour(i) {
    if (!stock.there[i] || gone(i)) return NONE;
    if (Number.isNaN(stock.surface[i])) return WOOD;
    const value = thickness(i);
    return value < LOW_MM ? LOW : ramp(value / span);
  }
  const range = byId("range");
  function chooseSpan() {
    const number = range.value === "blank" ? 1 : Math.max(1, operationAt(at));
    span = Math.max(stock.thickest[number - 1], 0.001);
  }
  function operationAt(place) { // rapids between operations count to the one before
    let k = place;
    while (k > 0 && !stock.operation[k]) k--;
    return stock.places ? stock.operation[k] : 0;
  }
  function key() {
    const title = document.createElement("strong"), strip = document.createElement("canvas"), marks = document.createElement("div");
    title.textContent = `thickness over the finished surface, ${unit}`;
    strip.width = 256; strip.height = 1;
    const pen = strip.getContext("2d");
    for (let i = 0; i < 256; i++) { pen.fillStyle = css(ramp(i / 255)); pen.fillRect(i, 0, 1, 1); }
    marks.className = "bar-scale";
    for (let i = 0; i <= 4; i++) {
      const mark = document.createElement("span");
      mark.textContent = length(span * i / 4);
      marks.append(mark);
    }
    const others = page.keys([[css(WOOD), "outside the part", true], [css(LOW), `more than ${length(-LOW_MM)} ${unit} too low`, true]]);
    byId("key").replaceChildren(title, strip, marks, others);
  }

  /* ---- plan ---- */
  const plan = byId("heights");
  const du = grid.u, dv = grid.v, area = du[0] * dv[1] - du[1] * dv[0];
  const middle = (i) => { const c = i % grid.columns, r = Math.floor(i / grid.columns); return [grid.zero[0] + c * du[0] + r * dv[0], grid.zero[1] + c * du[1] + r * dv[1]]; };
  let x0 = Infinity, x1 = -Infinity, y0 = Infinity, y1 = -Infinity;
  for (let i = 0; i < cells; i++) {
    if (!stock.there[i]) continue;
    const [x, y] = middle(i);
    x0 = Math.min(x0, x); x1 = Math.max(x1, x); y0 = Math.min(y0, y); y1 = Math.max(y1, y);
  }
  const rim = 0.03 * Math.max(x1 - x0, y1 - y0) + grid.step;
  x0 -= rim; x1 += rim; y0 -= rim; y1 += rim;
  function cellAt(x, y) {
    const p = x - grid.zero[0], q = y - grid.zero[1];
    const c = Math.round((p * dv[1] - q * dv[0]) / area), r = Math.round((du[0] * q - du[1] * p) / area);
    return c >= 0 && r >= 0 && c < grid.columns && r < grid.rows ? r * grid.columns + c : -1;
  }
  /* Every column one pixel of a small picture, drawn turned and clipped to an outline; columns just outside it take the
     colour of one inside, so that the picture reaches the edge. */
  function layer(inside, outline) {
    const from = new Int32Array(cells).fill(-1), small = document.createElement("canvas"), path = new Path2D();
    for (let i = 0; i < cells; i++) if (inside(i)) from[i] = i;
    for (let turn = 0; turn < 3; turn++) {
      const now = from.slice();
      for (let i = 0; i < cells; i++) {
        if (now[i] >= 0) continue;
        const c = i % grid.columns;
        for (const k of [c > 0 ? i - 1 : -1, c + 1 < grid.columns ? i + 1 : -1, i - grid.columns, i + grid.columns]) {
          if (k >= 0 && k < cells && now[k] >= 0) { from[i] = now[k]; break; }
        }
      }
    }
    for (const ring of outline) { ring.forEach(([x, y], k) => (k ? path.lineTo(x, y) : path.moveTo(x, y))); path.closePath(); }
    small.width = grid.columns; small.height = grid.rows;
    return { from, small, path, picture: new ImageData(grid.columns, grid.rows) };
  }
  const inPart = (i) => stock.there[i] && !Number.isNaN(stock.surface[i]);
  const layers = [layer((i) => stock.there[i] && !inPart(i), stock.rings.blank), layer(inPart, stock.rings.part)];
  let wide = 0, tall = 0, scale = 1, spot = null;
  function layPlan() {
    wide = byId("plan-box").clientWidth;
    scale = Math.min(wide / (x1 - x0), 560 / (y1 - y0));
    tall = Math.round((y1 - y0) * scale);
  }
  const left = () => (wide - (x1 - x0) * scale) / 2;
  const onPlan = (x, y) => [left() + (x - x0) * scale, (y1 - y) * scale];
  function drawPlan() {
    if (!wide) return;
    const pen = page.sheet(plan, wide, tall);
    pen.fillStyle = css(NONE);
    pen.fillRect(0, 0, wide, tall);
    pen.save();
    pen.transform(scale, 0, 0, -scale, left() - x0 * scale, y1 * scale);
    for (const { from, small, path, picture } of layers) {
      for (let i = 0; i < cells; i++) {
        const rgb = from[i] < 0 ? NONE : colour(from[i]);
        for (let c = 0; c < 3; c++) picture.data[4 * i + c] = rgb[c];
        picture.data[4 * i + 3] = from[i] < 0 ? 0 : 255;
      }
      small.getContext("2d").putImageData(picture, 0, 0);
      pen.save();
      pen.clip(path, "evenodd");
      pen.transform(du[0], du[1], dv[0], dv[1], ...grid.zero);
      pen.drawImage(small, -0.5, -0.5); // a pixel is centred on its column
      pen.restore();
      pen.lineWidth = 1 / scale; pen.strokeStyle = "#4d5966";
      pen.stroke(path);
    }
    pen.restore();
    if (stock.places) {
      const [x, y] = onPlan(stock.tip[3 * at], stock.tip[3 * at + 1]), bodies = page.data.cutters[stock.tool[at]];
      const r = bodies ? Math.max(...bodies[0].points.map(([radius]) => radius)) * scale : 5;
      for (const [width, ink] of [[4, "#fff"], [2, "#c05a00"]]) {
        pen.lineWidth = width; pen.strokeStyle = ink;
        pen.beginPath(); pen.arc(x, y, r, 0, 7); pen.stroke();
      }
    }
    if (spot) {
      const [x, y] = onPlan(...spot);
      for (const [width, ink] of [[5, "#fff"], [2, "#1b2430"]]) {
        pen.lineWidth = width; pen.strokeStyle = ink;
        pen.beginPath(); pen.moveTo(x - 8, y); pen.lineTo(x + 8, y); pen.moveTo(x, y - 8); pen.lineTo(x, y + 8); pen.stroke();
      }
    }
    ruler(pen);
  }
  function ruler(pen) {
    const most = (x1 - x0) / 3 * page.data.units.scale, ten = 10 ** Math.floor(Math.log10(most));
    const long = ten * [5, 2, 1].find((n) => n * ten <= most), px = long / page.data.units.scale * scale;
    pen.fillStyle = "rgba(255,255,255,.88)"; pen.fillRect(6, tall - 30, px + 20, 25);
    pen.strokeStyle = pen.fillStyle = "#1b2430"; pen.lineWidth = 1.5;
    pen.beginPath(); pen.moveTo(16, tall - 14); pen.lineTo(16, tall - 10); pen.lineTo(16 + px, tall - 10); pen.lineTo(16 + px, tall - 14); pen.stroke();
    pen.font = "12px system-ui, sans-serif"; pen.textAlign = "center";
    pen.fillText(`${+long.toPrecision(3)} ${unit}`, 16 + px / 2, tall - 16);
  }
  function readSpot() {
    if (!spot) return;
    const cell = cellAt(...spot), where = `X ${length(spot[0])}  Y ${length(spot[1])}`;
    const turns = byId("turns");
    turns.replaceChildren();
    if (cell < 0 || !stock.there[cell]) { byId("spot").textContent = `${where}   outside the blank`; return; }
    const mine = [];
    for (let k = 0; k < drops.cell.length; k++) if (drops.cell[k] === cell) mine.push(k);
    const so = mine.filter((k) => drops.place[k] <= at);
    const said = [where, gone(cell) ? "cut through" : `top Z ${length(top[cell])}`];
    if (!gone(cell) && !Number.isNaN(stock.surface[cell])) said.push(`${length(thickness(cell))} ${unit} over the finished surface`);
    said.push(so.length ? `last cut by line ${drops.line[so[so.length - 1]]}` : mine.length ? "not cut yet" : "never cut");
    byId("spot").textContent = said.join("   ");
    for (const k of mine.slice(-12)) {
      const button = document.createElement("button");
      button.type = "button";
      button.className = "to-line";
      button.textContent = `line ${drops.line[k]}, operation ${operationAt(drops.place[k])}: to Z ${length(drops.top[k])}`;
      button.addEventListener("click", () => go(drops.place[k]));
      turns.append(button);
    }
  }
  function pick(x, y) { spot = [Math.min(Math.max(x, x0), x1), Math.min(Math.max(y, y0), y1)]; readSpot(); drawPlan(); }
  plan.addEventListener("click", (event) => {
    const box = plan.getBoundingClientRect();
    pick(x0 + (event.clientX - box.left - left()) / scale, y1 - (event.clientY - box.top) / scale);
  });
  plan.addEventListener("keydown", (event) => {
    const move = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] }[event.key];
    if (!move) return;
    event.preventDefault();
    const [x, y] = spot || [(x0 + x1) / 2, (y0 + y1) / 2], step = grid.step * (event.shiftKey ? 10 : 1);
    pick(x + move[0] * step, y + move[1] * step);
  });

  /* ---- strip ---- */
  const chart = byId("chart"), choice = byId("quantity"), EDGE = 52, TALL = 190;
  for (const load of stock.loads) choice.add(new Option(`${load.title}, ${load.unit}`, load.key));
  const total = stock.places ? stock.clock[last] : 0;
  const across = (place, room) => EDGE + (total ? stock.clock[place] / total : place / Math.max(last, 1)) * (room - EDGE - 10);
  function drawChart() {
    const room = chart.parentElement.clientWidth - parseFloat(getComputedStyle(chart.parentElement).paddingLeft) * 2;
    const load = stock.loads.find((one) => one.key === choice.value);
    if (!load || room < 50) return;
    const pen = page.sheet(chart, room, TALL), floor = TALL - 26, tallest = floor - 14;
    let most = 0;
    for (const value of load.values) most = Math.max(most, value);
    most = most || 1;
    pen.clearRect(0, 0, room, TALL);
    pen.font = "12px system-ui, sans-serif";
    const ink = "#1b2430", level = (value) => floor - value / most * tallest;
    // One bar a screen column: the largest of the places in it, so no peak is lost.
    const bars = Math.floor(room - EDGE - 10), high = new Float32Array(bars + 1), low = new Float32Array(bars + 1), op = new Uint8Array(bars + 1);
    for (let k = 0, from = 0; k <= last; k++) {
      const to = Math.min(bars, Math.floor(across(k, room) - EDGE));
      for (let b = Math.min(from, to); b <= to; b++) {
        if (load.values[k] >= high[b]) { high[b] = load.values[k]; op[b] = stock.operation[k] || op[b]; }
        if (load.low) low[b] = Math.max(low[b], load.low[k]);
      }
      from = to;
    }
    for (let b = 0; b <= bars; b++) {
      const x = EDGE + b, base = load.low ? level(low[b]) : floor;
      if (load.low) { pen.fillStyle = "#dce6ee"; pen.fillRect(x, base, 1, floor - base); }
      pen.fillStyle = op[b] % 2 ? "#0b4f7d" : "#5c93b8";
      pen.fillRect(x, level(high[b]), 1, Math.max(base - level(high[b]), high[b] > 0 ? 1 : 0));
    }
    pen.strokeStyle = "#c3cad2"; pen.fillStyle = ink; pen.textAlign = "right";
    for (let i = 0; i <= 2; i++) {
      const y = level(most * i / 2);
      pen.beginPath(); pen.moveTo(EDGE, y); pen.lineTo(room - 10, y); pen.stroke();
      pen.fillText(fixed(most * i / 2, load.digits), EDGE - 5, y + 4);
    }
    pen.textAlign = "left";
    pen.fillText("0:00:00", EDGE, TALL - 8);
    pen.textAlign = "right";
    pen.fillText(page.clock(total), room - 10, TALL - 8);
    pen.strokeStyle = "#d98200"; pen.lineWidth = 2;
    pen.beginPath(); pen.moveTo(across(at, room), 4); pen.lineTo(across(at, room), floor + 4); pen.stroke();
    byId("chart-words").textContent = stock.places ? `${load.title} ${loadText(load, at)}   line ${stock.line[at]}` : "";
  }
  function loadText(load, place) {
    const value = fixed(load.values[place], load.digits);
    return `${load.low ? `${fixed(load.low[place], load.digits)} to ${value}` : value} ${load.unit}`.replace(" °", "°");
  }
  function placeAt(clientX) {
    const box = chart.getBoundingClientRect(), wanted = (clientX - box.left - EDGE) / (box.width - EDGE - 10) * total;
    let low = 0, high = last;
    while (low < high) { const half = (low + high) >> 1; if (stock.clock[half] < wanted) low = half + 1; else high = half; }
    return low;
  }
  chart.addEventListener("click", (event) => go(placeAt(event.clientX)));
  chart.addEventListener("keydown", (event) => {
    const step = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    if (step) { event.preventDefault(); go(at + step * (event.shiftKey ? 50 : 1)); }
  });
  choice.addEventListener("change", drawChart);

  /* ---- one place for all ---- */
  let solid = null, waiting = false;
  const slider = byId("at"), line = byId("line");
  slider.max = last;
  function go(place) {
    at = Math.min(Math.max(Math.round(place), 0), last);
    slider.value = at;
    if (waiting) return;
    waiting = true;
    requestAnimationFrame(() => { waiting = false; show(); });
  }
  function show() {
    cutTo(at);
    chooseSpan();
    key(); drawPlan(); readSpot(); drawChart();
    if (solid) solid();
    if (!stock.places) { byId("words").textContent = "The program cuts nothing."; return; }
    if (document.activeElement !== line) line.value = stock.line[at];
    const number = operationAt(at), said = [`line ${stock.line[at]}`];
    if (number) said.push(`operation ${number}, ${stock.operations[number - 1]}${stock.pass[at] ? `, pass ${stock.pass[at]}` : ""}`);
    said.push(`T${stock.tool[at]}`, stock.rapid[at] ? "rapid" : "at feed", `${page.clock(stock.clock[at])} of ${page.clock(total)}`);
    byId("words").textContent = said.join("   ");
    slider.setAttribute("aria-valuetext", said.join(", "));
  }
  slider.addEventListener("input", () => go(Number(slider.value)));
  for (const button of document.querySelectorAll("[data-step]")) button.addEventListener("click", () => go(at + Number(button.dataset.step)));
  line.addEventListener("change", () => {
    const wanted = Number(line.value), found = stock.line.findIndex((one) => one >= wanted);
    go(found < 0 ? last : found);
  });
  const jumps = [["blank", 0]];
  stock.operations.forEach((does, k) => {
    let end = last;
    while (end >= 0 && stock.operation[end] !== k + 1) end--;
    if (end >= 0) jumps.push([`after ${k + 1}, ${does}`, end]);
  });
  for (const [words, place] of jumps) {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = words;
    button.addEventListener("click", () => go(place));
    byId("jumps").append(button);
  }
  range.addEventListener("change", show);
  let before = "";
  new ResizeObserver(() => {
    const now = `${byId("plan-box").clientWidth} ${chart.parentElement.clientWidth}`;
    if (now === before) return;
    before = now;
    layPlan(); drawPlan(); drawChart();
  }).observe(document.querySelector("main"));

  /* ---- solid ---- */
  function startSolid() {
    const note = byId("viewer-note"), canvas = byId("solid");
    const say = (why) => { note.textContent = `No view in three dimensions: ${why}`; };
    if (typeof THREE === "undefined") { say(note.textContent || "three.js is not in this page."); return; }
    const context = canvas.getContext("webgl2", { antialias: true }) || canvas.getContext("webgl", { antialias: true });
    if (!context) { say("this browser offers no WebGL."); return; }
    const renderer = new THREE.WebGLRenderer({ canvas, context, antialias: true });
    for (const id of ["viewer", "view-buttons", "cutter-label"]) byId(id).hidden = false;
    byId("views").classList.remove("flat");
    renderer.setClearColor(0xeef1f4);
    const scene = new THREE.Scene(), camera = new THREE.PerspectiveCamera(32, 1, 1, 5000), lamp = new THREE.DirectionalLight(0xffffff, 0.5);
    scene.add(new THREE.HemisphereLight(0xffffff, 0x8c8c8c, 0.62), lamp);

    // Columns' tops as one sheet, then the same points at the bottom for the walls.
    const places = new Float32Array(6 * cells), shades = new Uint8Array(6 * cells), tops = [], walls = [];
    for (let i = 0; i < cells; i++) {
      const x = stock.places_xy[2 * i], y = stock.places_xy[2 * i + 1];
      places.set([x, y, top[i]], 3 * i);
      places.set([x, y, stock.bottom], 3 * (cells + i));
      shades.set([150, 141, 122], 3 * (cells + i));
    }
    const n = grid.columns;
    const full = (r, c) => r >= 0 && c >= 0 && r < grid.rows - 1 && c < n - 1 && stock.there[r * n + c] && stock.there[r * n + c + 1] && stock.there[r * n + n + c] && stock.there[r * n + n + c + 1];
    for (let r = 0; r < grid.rows - 1; r++) for (let c = 0; c < n - 1; c++) {
      if (!full(r, c)) continue;
      const i = r * n + c;
      tops.push([i, i + 1, i + n, i + n + 1]);
      if (!full(r - 1, c)) walls.push([i, i + 1]);
      if (!full(r, c + 1)) walls.push([i + 1, i + n + 1]);
      if (!full(r + 1, c)) walls.push([i + n + 1, i + n]);
      if (!full(r, c - 1)) walls.push([i + n, i]);
    }
    const index = new Uint32Array(6 * (tops.length + walls.length)), shape = new THREE.BufferGeometry();
    shape.setAttribute("position", new THREE.BufferAttribute(places, 3));
    shape.setAttribute("color", new THREE.BufferAttribute(shades, 3, true));
    shape.setIndex(new THREE.BufferAttribute(index, 1));
    const mesh = new THREE.Mesh(shape, new THREE.MeshPhongMaterial({ vertexColors: true, flatShading: true, side: THREE.DoubleSide, shininess: 0, specular: 0 }));
    mesh.frustumCulled = false;
    scene.add(mesh);
    function restock() {
      for (let i = 0; i < cells; i++) {
        places[3 * i + 2] = top[i];
        shades.set(gone(i) ? [150, 141, 122] : colour(i), 3 * i);
      }
      let k = 0;
      for (const [p, q, r, s] of tops) if (!(gone(p) && gone(q) && gone(r) && gone(s))) { index.set([p, q, r, q, s, r], k); k += 6; }
      for (const [p, q] of walls) if (!(gone(p) && gone(q))) { index.set([p, cells + p, q, q, cells + p, cells + q], k); k += 6; }
      shape.setDrawRange(0, k);
      for (const part of [shape.attributes.position, shape.attributes.color, shape.index]) part.needsUpdate = true;
    }

    const cutters = {}, LOOKS = { "cutting end": [0xd98200, 1], shank: [0x8b95a1, 0.9] };
    for (const [number, bodies] of Object.entries(page.data.cutters)) {
      const group = cutters[number] = new THREE.Group();
      for (const body of bodies) {
        const lathe = new THREE.LatheGeometry(body.points.map(([r, z]) => new THREE.Vector2(r, z)), 40);
        lathe.rotateX(Math.PI / 2); // a lathe turns about y; the cutter stands along z
        const [color, opacity] = LOOKS[body.name] || [0x4d5966, 0.45];
        group.add(new THREE.Mesh(lathe, new THREE.MeshLambertMaterial({ color, opacity, transparent: opacity < 1, side: THREE.DoubleSide })));
      }
      group.visible = false;
      scene.add(group);
    }
    const upright = new THREE.Vector3(0, 0, 1), leaned = new THREE.Vector3();
    function pose() {
      for (const [number, group] of Object.entries(cutters)) group.visible = stock.places > 0 && byId("show-cutter").checked && Number(number) === stock.tool[at];
      const group = cutters[stock.tool[at]];
      if (!group) return;
      group.position.fromArray(stock.tip, 3 * at);
      group.quaternion.setFromUnitVectors(upright, leaned.fromArray(stock.axis, 3 * at).normalize());
    }

    let ceiling = -Infinity;
    for (let i = 0; i < cells; i++) if (stock.there[i]) ceiling = Math.max(ceiling, stock.top[i]);
    const centre = new THREE.Vector3((x0 + x1) / 2, (y0 + y1) / 2, (stock.bottom + ceiling) / 2);
    const radius = Math.hypot(x1 - x0, y1 - y0, ceiling - stock.bottom) / 2, STEEPEST = 89.5 * Math.PI / 180;
    const controls = new THREE.TrackballControls(camera, canvas);
    Object.assign(controls, { staticMoving: true, rotateSpeed: 2.2, panSpeed: 0.8, keys: ["", "", ""], noZoom: true, minDistance: radius * 0.08, maxDistance: radius * 14 });
    camera.near = radius * 0.01;
    camera.far = radius * 40;
    let azimuth = 0, elevation = 0, asked = false, dragging = false, size = "";
    function draw() {
      if (asked) return;
      asked = true;
      requestAnimationFrame(() => { asked = false; renderer.render(scene, camera); canvas.dataset.frames = Number(canvas.dataset.frames || 0) + 1; });
    }
    function look(distance) {
      const flat = distance * Math.cos(elevation), target = controls.target;
      camera.position.set(target.x + flat * Math.cos(azimuth), target.y + flat * Math.sin(azimuth), target.z + distance * Math.sin(elevation));
      camera.up.set(0, 0, 1);
      camera.lookAt(target);
      lamp.position.copy(camera.position).add(new THREE.Vector3(-radius, radius, 2 * radius));
      draw();
    }
    function moved() { // what the trackball did, with the horizon kept level
      controls.update();
      const eye = camera.position.clone().sub(controls.target), next = Math.atan2(eye.y, eye.x);
      const over = Math.cos(next - azimuth) < 0;
      if (!over) azimuth = next;
      elevation = over ? Math.sign(eye.z) * STEEPEST : Math.min(Math.max(Math.asin(eye.z / eye.length()), -STEEPEST), STEEPEST);
      look(eye.length());
    }
    const VIEWS = { above: [-90, 89.5], front: [-90, 4], side: [0, 4], corner: [-55, 32] };
    function view(name) {
      [azimuth, elevation] = VIEWS[name].map((degrees) => degrees * Math.PI / 180);
      controls.target.copy(centre);
      look(radius / Math.sin(camera.fov / 2 * Math.PI / 180) / Math.min(1, camera.aspect) * 0.98);
    }
    for (const button of document.querySelectorAll("[data-view]")) button.addEventListener("click", () => view(button.dataset.view));
    canvas.addEventListener("pointerdown", () => { controls.handleResize(); canvas.focus({ preventScroll: true }); }, true);
    controls.addEventListener("start", () => { dragging = true; moved(); });
    controls.addEventListener("end", () => { dragging = false; moved(); });
    canvas.addEventListener("pointermove", () => { if (dragging) moved(); });
    canvas.addEventListener("focus", () => { controls.noZoom = false; });
    canvas.addEventListener("blur", () => { controls.noZoom = true; });
    canvas.addEventListener("keydown", (event) => {
      const turns = { ArrowLeft: [-6, 0], ArrowRight: [6, 0], ArrowUp: [0, 6], ArrowDown: [0, -6] }[event.key];
      const zoom = { "+": 0.88, "=": 0.88, "-": 1.14 }[event.key];
      if (!turns && !zoom) return;
      event.preventDefault();
      if (turns) {
        azimuth += turns[0] * Math.PI / 180;
        elevation = Math.min(Math.max(elevation + turns[1] * Math.PI / 180, -STEEPEST), STEEPEST);
      }
      look(Math.min(Math.max(camera.position.distanceTo(controls.target) * (zoom || 1), controls.minDistance), controls.maxDistance));
    });
    byId("show-cutter").addEventListener("change", () => { pose(); draw(); });
    function resize() {
      const width = canvas.clientWidth, height = canvas.clientHeight;
      if (!width || !height || size === `${width}x${height}`) return;
      size = `${width}x${height}`;
      renderer.setPixelRatio(Math.min(window.devicePixelRatio || 1, 2));
      renderer.setSize(width, height, false);
      camera.aspect = width / height;
      camera.updateProjectionMatrix();
      controls.handleResize();
      draw();
    }
    new ResizeObserver(resize).observe(byId("stage"));
    canvas.addEventListener("webglcontextrestored", draw);
    solid = () => { restock(); pose(); draw(); };
    resize();
    view("corner");
  }
  startSolid();
  layPlan();
  at = Math.min(stock.start, last);
  slider.value = at;
  show();
})();
