// The defect table: sorted, filtered and turned page by page; a row shows its place above.

const ROWS_SHOWN = 20;
const body = document.querySelector("#defect-table tbody");
let order = [];
let first = 0;
let sorting = { key: "", down: false };

function textOf(index) {
  return [page.kinds[defects.kind[index]].name, defects.outputs[defects.output[index]],
    defects.zones[defects.zone[index]], defects.column[index] + 1, defects.row[index] + 1].join(" ").toLowerCase();
}

function select() {
  const kind = document.getElementById("by-kind").value;
  const least = Number(document.getElementById("by-significance").value || 0);
  const words = document.getElementById("by-text").value.toLowerCase().split(/\s+/).filter(Boolean);
  order = [...defects.kind.keys()].filter((i) =>
    (kind === "" || defects.kind[i] === Number(kind)) &&
    (!least || Math.abs(defects.significance[i] ?? Infinity) >= least) &&
    words.every((word) => textOf(i).includes(word)));
  if (sorting.key) {
    const values = sortValues(sorting.key), turn = sorting.down ? -1 : 1;
    const compare = typeof values[0] === "string" ? (a, b) => a.localeCompare(b) : (a, b) => a - b;
    order.sort((a, b) => turn * compare(values[a], values[b]) || a - b);
  }
  first = 0;
  fill();
}

function sortValues(key) {
  if (key === "kind") return defects.kind.map((kind) => page.kinds[kind].name);
  if (key === "output") return defects.output.map((output) => defects.outputs[output]);
  if (key === "zone") return defects.zone.map((zone) => defects.zones[zone]);
  return defects[key].map((value) => value ?? Infinity);
}

function fill() {
  body.textContent = "";
  for (const index of order.slice(first, first + ROWS_SHOWN)) body.append(line(index));
  const last = Math.min(first + ROWS_SHOWN, order.length);
  document.getElementById("matching").textContent = `${order.length} of ${defects.kind.length} listed`;
  document.getElementById("page-of").textContent = order.length ? `${first + 1} to ${last} of ${order.length}` : "none";
  document.getElementById("back").disabled = first === 0;
  document.getElementById("forth").disabled = last >= order.length;
}

function line(index) {
  const row = document.createElement("tr");
  row.className = index === chosen ? "pick picked" : "pick";
  row.dataset.defect = index;
  const go = document.createElement("button");
  go.type = "button";
  go.className = "go";
  go.textContent = page.kinds[defects.kind[index]].name;
  cell(row, "").append(go);
  const wide = defects.column_stop[index] - defects.column_start[index];
  const high = defects.row_stop[index] - defects.row_start[index];
  const unit = defects.units[defects.unit[index]];
  cell(row, "number", defects.column[index] + 1);
  cell(row, "number", defects.row[index] + 1);
  cell(row, "number", wide === 1 && high === 1 ? "1 pixel" : `${wide} × ${high}`);
  cell(row, "number", `${withDoubt(defects.value[index], defects.uncertainty[index])} ${unit}`);
  cell(row, "number", defects.significance[index] === null ? "—" : shortNumber(defects.significance[index], 3));
  cell(row, "number", defects.probability[index] === null ? "—" : `${shortNumber(100 * defects.probability[index], 3)} %`);
  if (defects.outputs.some(Boolean)) cell(row, "", defects.outputs[defects.output[index]]);
  if (defects.zones.some(Boolean)) cell(row, "", defects.zones[defects.zone[index]]);
  row.addEventListener("click", () => {
    body.querySelectorAll(".picked").forEach((other) => other.classList.remove("picked"));
    row.classList.add("picked");
    showDefect(index);
  });
  return row;
}

function cell(row, name, text = "") {
  const made = row.insertCell();
  made.className = name;
  made.textContent = text;
  return made;
}

if (body) {
  for (const heading of document.querySelectorAll("#defect-table th button")) {
    heading.addEventListener("click", () => {
      const key = heading.dataset.sort, numeric = !["kind", "output", "zone"].includes(key);
      const down = sorting.key === key ? !sorting.down : numeric && !["row", "column"].includes(key);
      sorting = { key, down };
      document.querySelectorAll("#defect-table th").forEach((other) => other.setAttribute("aria-sort", "none"));
      heading.parentElement.setAttribute("aria-sort", down ? "descending" : "ascending");
      select();
    });
  }
  for (const name of ["by-kind", "by-significance", "by-text"]) {
    document.getElementById(name).addEventListener("input", select);
  }
  document.getElementById("back").addEventListener("click", () => { first -= ROWS_SHOWN; fill(); });
  document.getElementById("forth").addEventListener("click", () => { first += ROWS_SHOWN; fill(); });
  select();
}
