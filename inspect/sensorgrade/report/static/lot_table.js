// The table of devices: sorted, filtered, turned page by page, with a number of choice.

const page = JSON.parse(document.getElementById("data").textContent);
const devices = page.devices;
const ROWS_SHOWN = 40;
const table = document.getElementById("device-table");
const keys = [...table.querySelectorAll("th button")].map((button) => button.dataset.sort);
const count = devices.serial.length;
const numbersOf = []; // one promise of a Float32Array for each quantity, once asked for
const shape = {};
let order = [...devices.serial.keys()];
let first = 0;
let sorting = { key: "", down: false };
let also = null; // { quantity, values }

function byId(id) {
  return document.getElementById(id);
}

function textOf(key, index) {
  const column = devices[key];
  return Array.isArray(column) ? column[index] : column.words[column.index[index]];
}

// Values of the inspected devices, which come first; NaN where there is none.
function quantityValues(number) {
  numbersOf[number] ??= unpackedBytes(devices.quantities[number].values).then((bytes) => new Float32Array(bytes.buffer));
  return numbersOf[number];
}

function quantityName(number) {
  const { name, scope, unit } = devices.quantities[number];
  return `${name}${scope === "device" ? "" : `, ${scope}`}${unit ? ` [${unit}]` : ""}`;
}

function made(parent, tag, name, text = "") {
  const part = document.createElement(tag);
  if (name) part.className = name;
  part.textContent = text;
  parent.append(part);
  return part;
}

function signOf(decision) {
  const { body, stroke } = shape[decision];
  const drawing = document.createElementNS("http://www.w3.org/2000/svg", "svg");
  drawing.setAttribute("class", `sign ${decision}`);
  drawing.setAttribute("viewBox", "0 0 24 24");
  drawing.setAttribute("aria-hidden", "true");
  for (const [name, d] of [["body", body], ["stroke", stroke]]) {
    const path = document.createElementNS("http://www.w3.org/2000/svg", "path");
    path.setAttribute("class", name);
    path.setAttribute("d", d);
    drawing.append(path);
  }
  return drawing;
}
const ROUND = "M2 12a10 10 0 1 0 20 0a10 10 0 1 0-20 0z";
shape.accept = { body: ROUND, stroke: "M7 12.5l3.5 3.5l6.5-7.5" };
shape.reject = { body: "M3 3h18v18h-18z", stroke: "M8 8l8 8m0-8l-8 8" };
shape.undecided = { body: "M12 1.8l10.2 10.2l-10.2 10.2l-10.2-10.2z", stroke: "M8 12h8" };
shape.failed = { body: "M12 2.5l10.5 18.5h-21z", stroke: "M12 9v6m0 2.6v.6" };
shape.ungraded = { body: ROUND, stroke: "" };

function select() {
  const decision = byId("by-decision").value, grade = byId("by-grade").value;
  const words = byId("by-text").value.toLowerCase().split(/\s+/).filter(Boolean);
  const searched = ["serial", "lot", "wafer", "die", "grade", "state", "reason"];
  order = [...devices.serial.keys()].filter((i) =>
    (decision === "" || textOf("decision", i) === decision) &&
    (grade === "" || textOf("grade", i) === grade) &&
    (!words.length || (() => {
      const text = searched.map((key) => textOf(key, i)).join(" ").toLowerCase();
      return words.every((word) => text.includes(word));
    })()));
  if (sorting.key) {
    const turn = sorting.down ? -1 : 1;
    if (sorting.key === "also") {
      const value = (i) => (Number.isNaN(also.values[i] ?? NaN) ? turn * Infinity : also.values[i]);
      order.sort((a, b) => turn * (value(a) - value(b) || 0) || a - b);
    } else {
      const compare = new Intl.Collator(undefined, { numeric: true }).compare;
      order.sort((a, b) => turn * compare(textOf(sorting.key, a), textOf(sorting.key, b)) || a - b);
    }
  }
  first = 0;
  fill();
}

function fill() {
  const body = table.tBodies[0];
  body.textContent = "";
  for (const index of order.slice(first, first + ROWS_SHOWN)) body.append(line(index));
  const last = Math.min(first + ROWS_SHOWN, order.length);
  byId("matching").textContent = `${order.length} of ${count} listed`;
  byId("page-of").textContent = order.length ? `${first + 1} to ${last} of ${order.length}` : "none";
  byId("back").disabled = first === 0;
  byId("forth").disabled = last >= order.length;
}

function line(index) {
  const row = document.createElement("tr");
  row.dataset.device = index;
  for (const key of keys) {
    if (key !== "serial") {
      made(row, "td", key, textOf(key, index));
      continue;
    }
    const cell = made(row, "td", "break"), link = devices.link[index];
    cell.append(signOf(textOf("decision", index)), " ");
    if (link) made(cell, "a", "", devices.serial[index]).setAttribute("href", link);
    else cell.append(devices.serial[index]);
  }
  if (also) {
    const value = also.values[index];
    made(row, "td", "number", value === undefined || Number.isNaN(value) ? "—" : shortNumber(value));
  }
  return row;
}

function sortBy(heading, key) {
  const down = sorting.key === key ? !sorting.down : key === "also";
  sorting = { key, down };
  table.querySelectorAll("th").forEach((other) => other.setAttribute("aria-sort", "none"));
  heading.setAttribute("aria-sort", down ? "descending" : "ascending");
  select();
}

async function showAlso() {
  const number = byId("also").value, headings = table.tHead.rows[0];
  headings.querySelector(".also")?.remove();
  also = null;
  if (number !== "") {
    also = { values: await quantityValues(Number(number)) };
    const heading = made(headings, "th", "number also");
    heading.setAttribute("scope", "col");
    heading.setAttribute("aria-sort", "none");
    const button = made(heading, "button", "", quantityName(number));
    button.type = "button";
    button.addEventListener("click", () => sortBy(heading, "also"));
  }
  if (sorting.key === "also") sorting = { key: "", down: false };
  select();
}

function option(list, value, text) {
  made(list, "option", "", text).value = value;
}

for (const heading of table.querySelectorAll("th")) {
  heading.firstChild.addEventListener("click", () => sortBy(heading, heading.firstChild.dataset.sort));
}
devices.decision.words.forEach((word) => option(byId("by-decision"), word,
  textOf("state", devices.decision.index.indexOf(devices.decision.words.indexOf(word)))));
devices.grade.words.filter(Boolean).forEach((word) => option(byId("by-grade"), word, word));
devices.quantities.forEach((_, number) => option(byId("also"), number, quantityName(number)));
for (const id of ["by-decision", "by-grade", "by-text"]) byId(id).addEventListener("input", select);
byId("also").addEventListener("input", showAlso);
byId("back").addEventListener("click", () => { first -= ROWS_SHOWN; fill(); });
byId("forth").addEventListener("click", () => { first += ROWS_SHOWN; fill(); });
select();

