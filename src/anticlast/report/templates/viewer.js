/* The part, the blank, the passes and the cutter in three dimensions. Draws only when something changed. */
(() => {
  const { data, path } = page;
  const byId = (id) => document.getElementById(id);
  const note = byId("viewer-note");
  const say = (why) => { note.textContent = `No view in three dimensions: ${why} The plan view stands in for it.`; };
  if (typeof THREE === "undefined") { say(note.textContent ? `${note.textContent}.` : "three.js is not in this page."); return; }

  const canvas = byId("solid"), stage = byId("stage");
  let renderer;
  try {
    // Asked for beforehand, since three.js complains on the console when there is no WebGL.
    const options = { antialias: true, alpha: false, preserveDrawingBuffer: false };
    const context = canvas.getContext("webgl2", options) || canvas.getContext("webgl", options);
    if (!context) throw new Error("no WebGL");
    renderer = new THREE.WebGLRenderer({ canvas, context, antialias: true });
  } catch (error) {
    say("this browser offers no WebGL.");
    return;
  }
  byId("viewer").hidden = false;
  document.documentElement.classList.add("has-3d");
  renderer.setClearColor(0xeef1f4);

  /* ---- scene ---- */
  const scene = new THREE.Scene();
  const camera = new THREE.PerspectiveCamera(32, 1, 1, 5000);
  camera.up.set(0, 0, 1);
  scene.add(new THREE.HemisphereLight(0xffffff, 0x8c8c8c, 0.7));
  const lamp = new THREE.DirectionalLight(0xffffff, 0.55);
  scene.add(lamp);

  const { a, b, rotate } = data.surface;
  const cos = Math.cos(rotate), sin = Math.sin(rotate);
  const local = (x, y) => [x * cos + y * sin, y * cos - x * sin];
  function height(x, y) { const [p, q] = local(x, y); return a * p * p - b * q * q; }
  function normal(x, y) {
    const [p, q] = local(x, y);
    const dp = 2 * a * p, dq = -2 * b * q;
    const n = [-(dp * cos - dq * sin), -(dp * sin + dq * cos), 1];
    const size = Math.hypot(...n);
    return n.map((value) => value / size);
  }

  function surface() {
    const xy = page.unpacked(data.surface.xy), index = page.unpacked(data.surface.index);
    const n = xy.length / 2;
    const places = new Float32Array(3 * n), normals = new Float32Array(3 * n);
    for (let i = 0; i < n; i++) {
      const x = xy[2 * i], y = xy[2 * i + 1];
      places.set([x, y, height(x, y)], 3 * i);
      normals.set(normal(x, y), 3 * i);
    }
    const shape = new THREE.BufferGeometry();
    shape.setAttribute("position", new THREE.BufferAttribute(places, 3));
    shape.setAttribute("normal", new THREE.BufferAttribute(normals, 3));
    shape.setIndex(new THREE.BufferAttribute(index, 1));
    // Pushed back a little, so that passes lying on the surface are not half hidden by it.
    const look = new THREE.MeshLambertMaterial({ color: 0xb4b6b4, side: THREE.DoubleSide, polygonOffset: true, polygonOffsetFactor: 2, polygonOffsetUnits: 4 });
    return new THREE.Mesh(shape, look);
  }

  function prism(rings, low, high) {
    const group = new THREE.Group();
    const edges = [], walls = [];
    for (const ring of rings) {
      ring.forEach(([x, y], i) => {
        const [u, v] = ring[(i + 1) % ring.length];
        edges.push(x, y, low, u, v, low, x, y, high, u, v, high);
        if (ring.length <= 24 || i % Math.ceil(ring.length / 12) === 0) edges.push(x, y, low, x, y, high);
        walls.push(x, y, low, u, v, low, u, v, high, x, y, low, u, v, high, x, y, high);
      });
    }
    const line = new THREE.BufferGeometry();
    line.setAttribute("position", new THREE.Float32BufferAttribute(edges, 3));
    group.add(new THREE.LineSegments(line, new THREE.LineBasicMaterial({ color: 0x4d5966 })));
    const wall = new THREE.BufferGeometry();
    wall.setAttribute("position", new THREE.Float32BufferAttribute(walls, 3));
    group.add(new THREE.Mesh(wall, new THREE.MeshBasicMaterial({ color: 0x8fa3b5, transparent: true, opacity: 0.16, side: THREE.DoubleSide, depthWrite: false })));
    return group;
  }

  const blank = prism(data.blank.rings, data.blank.bottom, data.blank.top);
  scene.add(surface(), blank);

  /* ---- passes: one line piece a row, coloured at its end ---- */
  let passes = null, rapids = null;
  const colours = path ? new Uint8Array(6 * path.rows) : null;
  function pieces(rows) {
    const places = new Float32Array(6 * rows.length);
    rows.forEach(([from, to], i) => {
      for (let k = 0; k < 3; k++) {
        places[6 * i + k] = path.tip[3 * from + k];
        places[6 * i + 3 + k] = path.tip[3 * to + k];
      }
    });
    const shape = new THREE.BufferGeometry();
    shape.setAttribute("position", new THREE.BufferAttribute(places, 3));
    return shape;
  }
  const fed = [], hops = [], coarse = [];
  if (path) {
    // While dragging, runs of one kind of move are drawn with every sixth point only.
    let from = 0;
    for (let i = 1; i < path.rows; i++) {
      (path.purpose[i] === page.RAPID ? hops : fed).push([i - 1, i]);
      const last = i + 1 === path.rows || path.purpose[i + 1] !== path.purpose[i];
      if (path.purpose[i] === page.RAPID) from = i;
      else if (i - from >= 6 || last) { coarse.push([from, i]); from = i; }
    }
    const shape = pieces(fed);
    shape.setAttribute("color", new THREE.BufferAttribute(colours.subarray(0, 6 * fed.length), 3, true));
    passes = new THREE.LineSegments(shape, new THREE.LineBasicMaterial({ vertexColors: true }));
    rapids = new THREE.LineSegments(pieces(hops), new THREE.LineDashedMaterial({ color: 0xb04200, dashSize: 2, gapSize: 1.5 }));
    rapids.computeLineDistances();
    scene.add(passes, rapids);
  }
  let light = null;
  if (path && fed.length > 4000) {
    light = new THREE.LineSegments(pieces(coarse), new THREE.LineBasicMaterial({ vertexColors: true }));
    light.geometry.setAttribute("color", new THREE.BufferAttribute(new Uint8Array(6 * coarse.length), 3, true));
    light.visible = false;
    scene.add(light);
  }

  /* ---- colouring ---- */
  const select = byId("colour"), legend = byId("legend");
  function colourOf(entry) {
    if (entry === null) return (row) => page.MOVES[path.purpose[row]];
    const [low, high] = entry.span;
    return (row) => {
      const value = entry.values[row];
      return Number.isFinite(value) ? page.ramp((value - low) / (high - low)) : [150, 150, 150];
    };
  }
  function paint() {
    const entry = select.value === "purpose" ? null : page.quantity(select.value);
    const colour = colourOf(entry);
    for (const [lines, rows] of [[passes, fed], [light, coarse]]) {
      if (!lines) continue;
      const values = lines.geometry.attributes.color.array;
      rows.forEach(([, to], i) => {
        const rgb = colour(to);
        values.set(rgb, 6 * i);
        values.set(rgb, 6 * i + 3);
      });
      lines.geometry.attributes.color.needsUpdate = true;
    }
    const title = document.createElement("strong");
    if (entry === null) {
      title.textContent = "purpose of the move";
      const present = new Set(path.purpose);
      const kinds = Object.keys(path.purposes).map(Number).filter((kind) => present.has(kind));
      legend.replaceChildren(title, page.keys(kinds.map((kind) => [page.css(page.MOVES[kind]), path.purposes[kind]])));
    } else {
      title.textContent = entry.unit ? `${entry.title}, ${entry.unit}` : entry.title;
      const grey = page.keys([["rgb(150,150,150)", "does not apply"]]);
      legend.replaceChildren(title, page.scale(entry.span[0], entry.span[1], entry.digits), grey);
    }
    draw();
  }
  if (path) {
    const choices = [["purpose", "purpose of the move"], ...path.quantities.filter((q) => q.values.some(Number.isFinite)).map((q) => [q.key, q.title])];
    for (const [value, words] of choices) select.add(new Option(words, value));
    if (choices.some(([value]) => value === "reached")) select.value = "reached";
    select.addEventListener("change", paint);
  } else {
    select.closest("label").hidden = true;
    legend.hidden = true;
  }

  /* ---- cutter, shank and holder at the place along the program ---- */
  const cutters = {};
  const LOOKS = { "cutting end": [0xd98200, 1], shank: [0x8b95a1, 0.9] };
  for (const [number, bodies] of Object.entries(data.cutters)) {
    const group = new THREE.Group();
    for (const body of bodies) {
      const shape = new THREE.LatheGeometry(body.points.map(([r, z]) => new THREE.Vector2(r, z)), 40);
      shape.rotateX(Math.PI / 2); // a lathe turns about y; the cutter stands along z
      const [color, opacity] = LOOKS[body.name] || [0x4d5966, 0.45];
      group.add(new THREE.Mesh(shape, new THREE.MeshLambertMaterial({ color, opacity, transparent: opacity < 1, side: THREE.DoubleSide })));
    }
    group.visible = false;
    scene.add(group);
    cutters[number] = group;
  }
  const upright = new THREE.Vector3(0, 0, 1), leaned = new THREE.Vector3();
  function place(row) {
    const wanted = byId("show-cutter").checked;
    for (const [number, group] of Object.entries(cutters)) group.visible = wanted && Number(number) === path.tool[row];
    const group = cutters[path.tool[row]];
    if (group) {
      group.position.fromArray(path.tip, 3 * row);
      leaned.fromArray(path.axis, 3 * row).normalize();
      group.quaternion.setFromUnitVectors(upright, leaned);
    }
    const before = byId("only-before").checked;
    passes.geometry.setDrawRange(0, before ? 2 * count(fed, row) : Infinity);
    rapids.geometry.setDrawRange(0, before ? 2 * count(hops, row) : Infinity);
    if (light) light.geometry.setDrawRange(0, before ? 2 * count(coarse, row) : Infinity);
    draw();
  }
  function count(rows, row) { // pieces that end at or before a row
    let low = 0, high = rows.length;
    while (low < high) {
      const middle = (low + high) >> 1;
      if (rows[middle][1] <= row) low = middle + 1; else high = middle;
    }
    return low;
  }

  /* ---- camera: level horizon, Z up ---- */
  const bounds = new THREE.Box3().setFromObject(blank);
  const middle = bounds.getCenter(new THREE.Vector3());
  middle.z = Math.max(middle.z, 0);
  const radius = bounds.getSize(new THREE.Vector3()).length() / 2;
  const controls = new THREE.TrackballControls(camera, canvas);
  controls.staticMoving = true;
  controls.rotateSpeed = 2.2;
  controls.panSpeed = 0.8;
  controls.keys = ["", "", ""];
  controls.noZoom = true; // the wheel scrolls the page until the picture is clicked
  controls.minDistance = radius * 0.08;
  controls.maxDistance = radius * 14;
  camera.near = radius * 0.01;
  camera.far = radius * 40;

  const STEEPEST = 89.5 * Math.PI / 180;
  let azimuth = 0, elevation = 0;
  function look(distance) {
    const target = controls.target;
    camera.position.set(
      target.x + distance * Math.cos(elevation) * Math.cos(azimuth),
      target.y + distance * Math.cos(elevation) * Math.sin(azimuth),
      target.z + distance * Math.sin(elevation));
    camera.up.set(0, 0, 1);
    camera.lookAt(target);
    lamp.position.copy(camera.position).add(new THREE.Vector3(-radius, radius, 2 * radius));
  }
  /* What the trackball did, turned into azimuth and elevation, so that the horizon stays level and nothing turns over. */
  function level() {
    const eye = camera.position.clone().sub(controls.target);
    const distance = eye.length();
    const next = Math.atan2(eye.y, eye.x);
    const over = Math.cos(next - azimuth) < 0; // went over the top
    if (!over) azimuth = next;
    elevation = over ? Math.sign(eye.z) * STEEPEST : Math.asin(eye.z / distance);
    elevation = Math.min(Math.max(elevation, -STEEPEST), STEEPEST);
    look(distance);
  }
  const VIEWS = { above: [-90, 89.5], front: [-90, 4], side: [0, 4], corner: [-55, 32] };
  function view(name) {
    [azimuth, elevation] = VIEWS[name].map((degrees) => degrees * Math.PI / 180);
    controls.target.copy(middle);
    const narrow = Math.min(1, camera.aspect);
    look(radius / Math.sin(camera.fov / 2 * Math.PI / 180) / narrow * 0.98);
    draw();
  }
  for (const button of document.querySelectorAll("[data-view]")) button.addEventListener("click", () => view(button.dataset.view));

  /* ---- drawing on demand ---- */
  let waiting = false, dragging = false;
  let frames = 0;
  function draw() {
    if (waiting) return;
    waiting = true;
    requestAnimationFrame(() => {
      waiting = false;
      if (light) { light.visible = dragging; passes.visible = !dragging; }
      renderer.render(scene, camera);
      canvas.dataset.frames = ++frames;
    });
  }
  function moved() { controls.update(); level(); draw(); }
  canvas.addEventListener("pointerdown", () => { controls.handleResize(); }, true);
  controls.addEventListener("start", () => { dragging = true; moved(); });
  controls.addEventListener("end", () => { dragging = false; moved(); });
  canvas.addEventListener("pointermove", () => { if (dragging) moved(); });
  canvas.addEventListener("focus", () => { controls.noZoom = false; });
  canvas.addEventListener("blur", () => { controls.noZoom = true; });
  canvas.addEventListener("pointerdown", () => canvas.focus({ preventScroll: true }));
  canvas.addEventListener("keydown", (event) => {
    const turns = { ArrowLeft: [-6, 0], ArrowRight: [6, 0], ArrowUp: [0, 6], ArrowDown: [0, -6] }[event.key];
    const zoom = { "+": 0.88, "=": 0.88, "-": 1.14 }[event.key];
    if (!turns && !zoom) return;
    event.preventDefault();
    const distance = camera.position.distanceTo(controls.target) * (zoom || 1);
    if (turns) {
      azimuth += turns[0] * Math.PI / 180;
      elevation = Math.min(Math.max(elevation + turns[1] * Math.PI / 180, -STEEPEST), STEEPEST);
    }
    look(Math.min(Math.max(distance, controls.minDistance), controls.maxDistance));
    draw();
  });
  byId("show-blank").addEventListener("change", (event) => { blank.visible = event.target.checked; draw(); });
  if (path) {
    byId("show-rapids").addEventListener("change", (event) => { rapids.visible = event.target.checked; draw(); });
    byId("show-cutter").addEventListener("change", () => place(page.at));
    byId("only-before").addEventListener("change", () => place(page.at));
  } else {
    for (const id of ["show-rapids", "show-cutter", "only-before"]) byId(id).closest("label").hidden = true;
  }

  let shape = "";
  function resize() {
    const width = canvas.clientWidth, tall = canvas.clientHeight;
    if (!width || !tall || shape === `${width}x${tall}`) return;
    shape = `${width}x${tall}`;
    renderer.setPixelRatio(Math.min(window.devicePixelRatio || 1, 2));
    renderer.setSize(width, tall, false);
    camera.aspect = width / tall;
    camera.updateProjectionMatrix();
    controls.handleResize();
    draw();
  }
  new ResizeObserver(resize).observe(stage);
  canvas.addEventListener("webglcontextrestored", draw);

  resize();
  view("corner");
  if (path) {
    page.watch(place);
    paint();
  }
})();
