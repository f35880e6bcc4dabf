// Dies coloured by a quantity instead of by grade.

const wafers = byId("wafers");

async function colourDies() {
  const chosen = byId("wafer-colour").value, dies = [...wafers.querySelectorAll(".die")];
  const byNumber = chosen !== "";
  wafers.classList.toggle("by-number", byNumber);
  byId("wafer-keys").hidden = byNumber;
  byId("wafer-scale").hidden = !byNumber;
  if (!byNumber) {
    dies.forEach((die) => { die.querySelector("rect").style.fill = ""; });
    return;
  }
  const values = await quantityValues(Number(chosen));
  const shown = dies.map((die) => values[Number(die.dataset.device)] ?? NaN);
  const sorted = shown.filter(Number.isFinite).sort((a, b) => a - b);
  const low = sorted[Math.floor(0.02 * (sorted.length - 1))], high = sorted[Math.ceil(0.98 * (sorted.length - 1))];
  const { unit } = devices.quantities[Number(chosen)];
  dies.forEach((die, index) => {
    const value = shown[index], known = Number.isFinite(value);
    const share = known ? Math.min(Math.max((value - low) / (high - low || 1), 0), 1) : 0;
    die.classList.toggle("empty", !known);
    die.style.setProperty("--mark", share > 0.5 ? "var(--from)" : "var(--to)");
    die.querySelector("rect").style.fill = known ? `color-mix(in oklab, var(--to) ${(100 * share).toFixed(1)}%, var(--from))` : "";
    const title = die.querySelector("title");
    title.dataset.plain ??= title.textContent;
    title.textContent = known ? `${title.dataset.plain}, ${quantityName(chosen)} ${shortNumber(value)}` : title.dataset.plain;
  });
  const [left, , right] = byId("wafer-scale").children;
  left.textContent = low === undefined ? "" : shortNumber(low, 4);
  right.textContent = high === undefined ? "" : `${shortNumber(high, 4)} ${unit}`;
}

if (wafers) {
  devices.quantities.forEach((_, number) => option(byId("wafer-colour"), number, quantityName(number)));
  byId("wafer-colour").addEventListener("input", colourDies);
}
