// Limits moved by hand. A device meets a limit when the tightest bound that would accept it, which
// the program worked out by the recipe's decision rule, is no looser than the limit.

const whatIf = page.whatIf;
const mover = byId("mover");
const moved = byId("moved");
const STEPS_OF_SLIDER = 400;
let bounds = []; // one Float64Array for each row of the data
let level = null; // the grade shown: { limits: [{...limit, now, from, to, parts}] }

function meets(limit, value, bound = limit.now) {
  return limit.upward ? value <= bound : value >= bound;
}

function missedCounts() {
  const missed = new Uint16Array(level.devices);
  for (const limit of level.limits) {
    const values = bounds[limit.row];
    for (let i = 0; i < values.length; i++) if (!meets(limit, values[i])) missed[i]++;
  }
  return missed;
}

function update() {
  const missed = missedCounts();
  let accepted = 0;
  for (const one of missed) if (one === 0) accepted++;
  const share = level.devices ? (100 * accepted) / level.devices : 0, gain = accepted - level.stated;
  const output = byId("move-yield");
  output.textContent = `${accepted} of ${level.devices} meet ${level.name}, ${share.toFixed(1)} % `;
  made(output, "small", "", gain ? `(${gain > 0 ? "+" : "−"}${Math.abs(gain)} against the recipe)` : "(as in the recipe)");
  const open = level.limits.map((limit) => reachable(limit, missed));
  const top = Math.max(1, ...open.map((own) => own.length));
  level.limits.forEach((limit, index) => drawCurve(limit, open[index], top));
}

// What this limit alone decides: the bounds, ascending, of devices that meet all the others.
function reachable(limit, missed) {
  const values = bounds[limit.row];
  return values.filter((value, i) => missed[i] - (meets(limit, value) ? 0 : 1) === 0).sort();
}

// Devices accepted against this limit, on a scale from none to ``top``.
function drawCurve(limit, own, top) {
  const points = [];
  let at = 0;
  for (let step = 0; step <= 200; step++) {
    const bound = limit.from + ((limit.to - limit.from) * step) / 200;
    while (at < own.length && (limit.upward ? own[at] <= bound : own[at] < bound)) at++;
    const accepted = limit.upward ? at : own.length - at;
    points.push(`${step / 2} ${(30 - (28 * accepted) / top).toFixed(2)}`);
  }
  const place = (value) => ((100 * (value - limit.from)) / (limit.to - limit.from)).toFixed(2);
  const { area, rim, was, now, gain, item } = limit.parts;
  rim.setAttribute("d", `M${points.join("L")}`);
  area.setAttribute("d", `M0 30L${points.join("L")}L100 30z`);
  was.setAttribute("d", `M${place(limit.bound)} 0V30`);
  now.setAttribute("d", `M${place(limit.now)} 0V30`);
  const finite = own.filter(Number.isFinite).length;
  gain.textContent = `${finite} without this limit`;
  item.classList.toggle("changed", limit.now !== limit.bound);
}

function drawnPath(drawing, name) {
  const path = document.createElementNS("http://www.w3.org/2000/svg", "path");
  path.setAttribute("class", name);
  drawing.append(path);
  return path;
}

function row(limit) {
  const item = made(moved, "li", "");
  const name = made(item, "span", "of", limit.name);
  made(name, "span", "place", `recipe: ${limit.upward ? "at most" : "at least"} ${shortNumber(limit.bound, 6)} ${limit.unit}${limit.held ? ` at ${limit.held}` : ""}`);
  const box = made(item, "div", "curve");
  const drawing = document.createElementNS("http://www.w3.org/2000/svg", "svg");
  drawing.setAttribute("viewBox", "0 0 100 30");
  drawing.setAttribute("preserveAspectRatio", "none");
  drawing.setAttribute("aria-hidden", "true");
  box.append(drawing);
  const parts = { item };
  for (const part of ["area", "rim", "was", "now"]) parts[part] = drawnPath(drawing, part);
  const slider = made(box, "input", "");
  Object.assign(slider, { type: "range", min: 0, max: STEPS_OF_SLIDER, step: 1 });
  slider.setAttribute("aria-label", `${limit.name}, move the limit`);
  const bound = made(item, "label", "bound", limit.upward ? "≤ " : "≥ ");
  const field = made(bound, "input", "");
  Object.assign(field, { type: "number", step: limit.whole ? 1 : "any" });
  field.setAttribute("aria-label", `${limit.name}, the limit`);
  made(bound, "span", "", limit.unit);
  parts.gain = made(item, "span", "gain");
  Object.assign(limit, { parts, slider, field });
  slider.addEventListener("input", () => {
    const value = limit.from + ((limit.to - limit.from) * Number(slider.value)) / STEPS_OF_SLIDER;
    move(limit, limit.whole ? Math.round(value) : Number(value.toPrecision(4)), field);
  });
  field.addEventListener("input", () => {
    if (field.value !== "" && Number.isFinite(field.valueAsNumber)) move(limit, field.valueAsNumber, slider);
  });
  show(limit);
}

// The number was changed in one place; the other follows.
function move(limit, value, follower) {
  limit.now = value;
  if (follower === limit.field) limit.field.value = value;
  else limit.slider.value = sliderPlace(limit);
  update();
}

function sliderPlace(limit) {
  return Math.round((STEPS_OF_SLIDER * (limit.now - limit.from)) / (limit.to - limit.from));
}

function show(limit) {
  limit.field.value = limit.now;
  limit.slider.value = sliderPlace(limit);
}

// The slider runs over the bulk of the devices and both sides of the limit.
function withRange(limit) {
  const finite = bounds[limit.row].filter(Number.isFinite).sort();
  const at = (share) => finite[Math.round(share * (finite.length - 1))] ?? limit.bound;
  const low = Math.min(at(0.01), limit.bound), high = Math.max(at(0.99), limit.bound);
  const rim = 0.15 * (high - low) || Math.abs(limit.bound) * 0.5 || 1;
  const whole = limit.whole;
  const from = low >= 0 ? Math.max(0, low - rim) : low - rim;
  return { ...limit, now: limit.bound, from: whole ? Math.floor(from) : from, to: whole ? Math.ceil(high + rim) : high + rim };
}

function openGrade() {
  const { name, limits } = whatIf.grades[Number(byId("move-grade").value)];
  moved.textContent = "";
  level = { name, limits: limits.map(withRange), devices: whatIf.devices, stated: 0 };
  const missed = missedCounts();
  for (const one of missed) if (one === 0) level.stated++;
  level.limits.forEach(row);
  update();
}

async function startMoving() {
  bounds = await Promise.all(whatIf.bounds.map(async (text) => new Float64Array((await unpackedBytes(text)).buffer)));
  byId("move-grade").addEventListener("input", openGrade);
  byId("move-back").addEventListener("click", () => {
    for (const limit of level.limits) {
      limit.now = limit.bound;
      show(limit);
    }
    update();
  });
  openGrade();
  mover.dataset.ready = "yes";
}

if (mover) startMoving();

