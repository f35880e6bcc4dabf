// The masters side by side: they move and magnify together, with the defects marked on them.
// Rows count from the bottom; view.row, view.column is the sensor position (pixel edges at whole
// numbers) in the middle of every pane, view.zoom the length of one pixel on the screen.

const page = JSON.parse(document.getElementById("data").textContent);
const panes = [...document.querySelectorAll(".pane")].map((box, index) => ({
  box, canvas: box.querySelector("canvas"), picture: page.pictures[index], sheet: null, atlas: null,
}));
const viewer = document.getElementById("viewer");
const readout = document.getElementById("readout");
const layers = [...document.querySelectorAll(".layer")];
const tileIndex = new Map(page.tiles.map(([row, column], index) => [row + "," + column, index]));
const defects = page.defects;
const marks = page.kinds.map((kind) => new Path2D(kind.path));
const ATLAS_TILES = 32; // tiles in one line of the atlas
const CLOSE = 14; // screen pixels per sensor pixel after a click on a defect
const view = { row: page.rows / 2, column: page.columns / 2, zoom: 1, whole: true };
let pointed = null; // {row, column} of the pixel that is read
let chosen = -1; // index of the defect that was clicked
let scheduled = false;

// ---- values

async function unpackedCodes(text) {
  const planes = await unpackedBytes(text), half = planes.length / 2;
  const codes = new Uint16Array(half);
  for (let i = 0; i < half; i++) codes[i] = (planes[i] << 8) | planes[half + i];
  return codes;
}

function valueOf(code, picture) {
  if (code === page.noValue) return null;
  return picture.median + picture.spread * Math.sinh((code - page.centre) / page.steps);
}

function greys(picture) {
  const table = new Uint8ClampedArray(65536);
  const scale = 255 / (picture.high - picture.low);
  for (let code = 1; code < 65536; code++) table[code] = (valueOf(code, picture) - picture.low) * scale;
  return table;
}

function painted(codes, width, height, table, place) {
  const canvas = document.createElement("canvas");
  canvas.width = width;
  canvas.height = height;
  const context = canvas.getContext("2d");
  const image = context.createImageData(width, height);
  const pixels = new Uint32Array(image.data.buffer);
  for (let i = 0; i < codes.length; i++) {
    const grey = table[codes[i]];
    pixels[place(i)] = 0xff000000 | (grey << 16) | (grey << 8) | grey;
  }
  context.putImageData(image, 0, 0);
  return canvas;
}

async function open(pane) {
  const { picture } = pane;
  const table = greys(picture);
  const width = Math.ceil(page.columns / picture.block), height = Math.ceil(page.rows / picture.block);
  pane.codes = await unpackedCodes(picture.overview);
  pane.width = width;
  pane.height = height;
  pane.sheet = painted(pane.codes, width, height, table,
    (i) => (height - 1 - Math.floor(i / width)) * width + (i % width));
  pane.tileCodes = await unpackedCodes(picture.tiles);
  const tile = page.tile, area = tile * tile, count = pane.tileCodes.length / area;
  if (!count) return;
  const across = ATLAS_TILES * tile;
  pane.atlas = painted(pane.tileCodes, across, Math.ceil(count / ATLAS_TILES) * tile, table, (i) => {
    const index = Math.floor(i / area), row = Math.floor((i % area) / tile), column = i % tile;
    const top = Math.floor(index / ATLAS_TILES) * tile, left = (index % ATLAS_TILES) * tile;
    return (top + tile - 1 - row) * across + left + column;
  });
}

// What a pane knows of one pixel: {value, exact}; null where there is none.
function valueAt(pane, row, column) {
  const { picture } = pane, tile = page.tile;
  const index = tileIndex.get(Math.floor(row / tile) + "," + Math.floor(column / tile));
  if (picture.block > 1 && index !== undefined) {
    const code = pane.tileCodes[index * tile * tile + (row % tile) * tile + (column % tile)];
    return { value: valueOf(code, picture), exact: true };
  }
  if (!pane.codes) return null;
  const code = pane.codes[Math.floor(row / picture.block) * pane.width + Math.floor(column / picture.block)];
  return { value: valueOf(code, picture), exact: picture.block === 1 };
}

// ---- drawing

function wholeZoom() {
  const box = panes[0].canvas;
  return Math.min(box.clientWidth / page.columns, box.clientHeight / page.rows);
}

function redraw() {
  if (scheduled) return;
  scheduled = true;
  requestAnimationFrame(() => {
    scheduled = false;
    if (view.whole && panes.length) {
      Object.assign(view, { row: page.rows / 2, column: page.columns / 2, zoom: wholeZoom() });
    }
    viewer.classList.toggle("zoomed", !view.whole);
    panes.forEach(draw);
  });
}

function draw(pane) {
  const { canvas, picture } = pane, ratio = window.devicePixelRatio || 1;
  const width = canvas.clientWidth, height = canvas.clientHeight;
  if (!pane.sheet || !width) return;
  if (canvas.width !== Math.round(width * ratio)) canvas.width = Math.round(width * ratio);
  if (canvas.height !== Math.round(height * ratio)) canvas.height = Math.round(height * ratio);
  const context = canvas.getContext("2d"), zoom = view.zoom;
  context.setTransform(ratio, 0, 0, ratio, 0, 0);
  context.fillStyle = "#33393c";
  context.fillRect(0, 0, width, height);
  const x = (column) => width / 2 + (column - view.column) * zoom;
  const y = (row) => height / 2 - (row - view.row) * zoom;
  context.save();
  context.beginPath();
  context.rect(x(0), y(page.rows), page.columns * zoom, page.rows * zoom);
  context.clip();
  context.imageSmoothingEnabled = zoom * picture.block * ratio < 1;
  const rows = pane.height * picture.block, columns = pane.width * picture.block;
  context.drawImage(pane.sheet, x(0), y(rows), columns * zoom, rows * zoom);
  if (pane.atlas && zoom * ratio > 0.5) {
    const tile = page.tile, side = tile * zoom;
    page.tiles.forEach(([tileRow, tileColumn], index) => {
      const left = x(tileColumn * tile), top = y((tileRow + 1) * tile);
      if (left > width || top > height || left + side < 0 || top + side < 0) return;
      context.drawImage(pane.atlas, (index % ATLAS_TILES) * tile, Math.floor(index / ATLAS_TILES) * tile,
        tile, tile, left, top, side, side);
    });
  }
  context.restore();
  drawMarks(context, x, y, width, height);
  drawPointer(context, x, y);
}

function drawMarks(context, x, y, width, height) {
  const zoom = view.zoom, shown = new Set(shownKinds());
  const size = Math.min(1, Math.max(0.55, 0.5 + zoom / 4)); // small marks on the whole sensor
  for (let kind = 0; kind < page.kinds.length; kind++) {
    if (!shown.has(kind)) continue;
    const outline = new Path2D();
    for (let i = 0; i < defects.kind.length; i++) {
      if (defects.kind[i] !== kind) continue;
      const left = x(defects.column_start[i]), right = x(defects.column_stop[i]);
      const top = y(defects.row_stop[i]), bottom = y(defects.row_start[i]);
      if (right < -9 || left > width + 9 || bottom < -9 || top > height + 9) continue;
      const extended = defects.pixels[i] > 1 && Math.max(right - left, bottom - top) > 10;
      if (extended || zoom >= 10) {
        outline.rect(left - 2, top - 2, right - left + 4, bottom - top + 4);
      } else {
        outline.addPath(marks[kind], new DOMMatrix([size, 0, 0, size, x(defects.column[i] + 0.5), y(defects.row[i] + 0.5)]));
      }
    }
    context.strokeStyle = "rgba(0, 0, 0, .7)";
    context.lineWidth = 3.2;
    context.stroke(outline);
    context.strokeStyle = page.kinds[kind].colour;
    context.lineWidth = 1.6;
    context.stroke(outline);
  }
  if (chosen >= 0) {
    const reach = 12 + view.zoom / 2;
    for (const [colour, thick] of [["#000", 5], ["#fff", 2]]) {
      context.strokeStyle = colour;
      context.lineWidth = thick;
      context.beginPath();
      context.arc(x(defects.column[chosen] + 0.5), y(defects.row[chosen] + 0.5), reach, 0, 7);
      context.stroke();
    }
  }
}

function drawPointer(context, x, y) {
  if (!pointed) return;
  const half = Math.max(view.zoom, 7) / 2, cx = x(pointed.column + 0.5), cy = y(pointed.row + 0.5);
  for (const [colour, thick] of [["#000", 3], ["#fff", 1]]) {
    context.strokeStyle = colour;
    context.lineWidth = thick;
    context.strokeRect(cx - half, cy - half, 2 * half, 2 * half);
  }
}

// ---- reading and moving

function read() {
  readout.textContent = "";
  if (!pointed) return;
  const { row, column } = pointed;
  say("place", `x ${column + 1}, y ${row + 1}`, "b");
  say("kindly", `row ${row}, column ${column}`);
  for (const pane of panes) {
    const found = valueAt(pane, row, column);
    if (!found) continue;
    const block = pane.picture.block, about = found.exact ? "" : ` (mean of ${block} × ${block})`;
    say("value", `${pane.picture.title} ${shortNumber(found.value)} ${pane.picture.unit}${about}`);
  }
  const here = kindsAt(row, column);
  if (here.length) say("value", here.join(", "), "b");
}

function say(name, text, tag = "span") {
  const part = document.createElement(tag);
  part.className = name;
  part.textContent = text;
  readout.append(part);
}

function kindsAt(row, column) {
  const found = new Set();
  for (let i = 0; i < defects.kind.length; i++) {
    if (row >= defects.row_start[i] && row < defects.row_stop[i] &&
        column >= defects.column_start[i] && column < defects.column_stop[i]) {
      found.add(page.kinds[defects.kind[i]].name);
    }
  }
  return [...found];
}

function shownKinds() {
  return layers.filter((box) => box.checked).map((box) => Number(box.value));
}

function point(row, column) {
  pointed = {
    row: Math.min(Math.max(Math.floor(row), 0), page.rows - 1),
    column: Math.min(Math.max(Math.floor(column), 0), page.columns - 1),
  };
  read();
  redraw();
}

function place(event, canvas) {
  const box = canvas.getBoundingClientRect();
  const dx = event.clientX - box.left - box.width / 2, dy = event.clientY - box.top - box.height / 2;
  return { row: view.row - dy / view.zoom, column: view.column + dx / view.zoom, dx, dy };
}

function magnify(factor, at = null) {
  const least = wholeZoom(), zoom = Math.min(Math.max(view.zoom * factor, least), 48);
  const spot = at || { row: view.row, column: view.column, dx: 0, dy: 0 };
  view.whole = zoom <= least;
  Object.assign(view, { zoom, row: spot.row + spot.dy / zoom, column: spot.column - spot.dx / zoom });
  keepInside();
  redraw();
}

function keepInside() {
  view.row = Math.min(Math.max(view.row, 0), page.rows);
  view.column = Math.min(Math.max(view.column, 0), page.columns);
}

function showWhole() {
  view.whole = true;
  redraw();
}

// The defect in the middle of every pane, close enough to see its neighbours.
function showDefect(index) {
  chosen = index;
  const high = defects.row_stop[index] - defects.row_start[index];
  const wide = defects.column_stop[index] - defects.column_start[index];
  const box = panes.length ? panes[0].canvas : { clientWidth: 300, clientHeight: 300 };
  const fits = 0.7 * Math.min(box.clientWidth / wide, box.clientHeight / high);
  const zoom = Math.max(Math.min(CLOSE, Math.max(fits, 4)), panes.length ? wholeZoom() : 1);
  Object.assign(view, { whole: false, zoom, row: defects.row[index] + 0.5, column: defects.column[index] + 0.5 });
  layers.forEach((layer) => { if (Number(layer.value) === defects.kind[index]) layer.checked = true; });
  point(defects.row[index], defects.column[index]);
  const motion = window.matchMedia("(prefers-reduced-motion: reduce)").matches ? "auto" : "smooth";
  viewer.scrollIntoView({ block: "start", behavior: motion });
}

function listen(pane) {
  const { canvas, box } = pane, fingers = new Map();
  canvas.addEventListener("pointerdown", (event) => {
    fingers.set(event.pointerId, event);
    canvas.setPointerCapture(event.pointerId);
    const spot = place(event, canvas);
    point(spot.row, spot.column);
  });
  canvas.addEventListener("pointermove", (event) => {
    const before = fingers.get(event.pointerId);
    if (!before) {
      const spot = place(event, canvas);
      return point(spot.row, spot.column);
    }
    const others = [...fingers.values()].filter((other) => other.pointerId !== event.pointerId);
    if (others.length) {
      const [other] = others, length = (a) => Math.hypot(a.clientX - other.clientX, a.clientY - other.clientY);
      magnify(length(event) / Math.max(length(before), 1), place(event, canvas));
    } else if (!view.whole) {
      view.column -= (event.clientX - before.clientX) / view.zoom;
      view.row += (event.clientY - before.clientY) / view.zoom;
      keepInside();
      redraw();
    }
    fingers.set(event.pointerId, event);
  });
  for (const end of ["pointerup", "pointercancel"]) {
    canvas.addEventListener(end, (event) => fingers.delete(event.pointerId));
  }
  canvas.addEventListener("dblclick", (event) => magnify(3, place(event, canvas)));
  canvas.addEventListener("wheel", (event) => {
    if (!event.ctrlKey && !event.metaKey) return; // the plain wheel scrolls the page
    event.preventDefault();
    magnify(Math.exp(-event.deltaY / 250), place(event, canvas));
  }, { passive: false });
  box.addEventListener("keydown", (event) => {
    const steps = { ArrowUp: [1, 0], ArrowDown: [-1, 0], ArrowLeft: [0, -1], ArrowRight: [0, 1] };
    const far = event.shiftKey ? 10 : 1, from = pointed || { row: view.row, column: view.column };
    if (steps[event.key]) {
      point(from.row + far * steps[event.key][0], from.column + far * steps[event.key][1]);
      if (!view.whole) Object.assign(view, { row: pointed.row + 0.5, column: pointed.column + 0.5 });
    } else if (event.key === "+" || event.key === "=") {
      if (pointed) Object.assign(view, { row: pointed.row + 0.5, column: pointed.column + 0.5 });
      magnify(2);
    } else if (event.key === "-") {
      magnify(0.5);
    } else if (event.key === "0") {
      showWhole();
    } else {
      return;
    }
    event.preventDefault();
  });
}

async function start() {
  document.getElementById("closer").addEventListener("click", () => magnify(2));
  document.getElementById("wider").addEventListener("click", () => magnify(0.5));
  document.getElementById("whole").addEventListener("click", showWhole);
  layers.forEach((layer) => layer.addEventListener("change", redraw));
  window.addEventListener("resize", redraw);
  window.addEventListener("beforeprint", showWhole);
  panes.forEach(listen);
  await Promise.all(panes.map(open));
  viewer.dataset.ready = "yes";
  redraw();
}

start();
