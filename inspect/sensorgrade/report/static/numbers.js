"use strict";
// Numbers as they come in the page and as people read them.

async function unpackedBytes(text) {
  const bytes = Uint8Array.from(atob(text), (letter) => letter.charCodeAt(0));
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("deflate"));
  return new Uint8Array(await new Response(stream).arrayBuffer());
}

function shortNumber(value, digits = 5) {
  if (value === null) return "none";
  const size = Math.abs(value);
  if (size !== 0 && (size < 1e-3 || size >= 1e7)) {
    const [mantissa, power] = value.toExponential(digits - 2).split("e");
    const raised = [...power.replace("+", "")].map((letter) => "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"["-0123456789".indexOf(letter)]).join("");
    return `${Number(mantissa)} × 10${raised}`.replace("-", "−");
  }
  const places = Math.max(0, digits - 1 - Math.floor(Math.log10(size || 1)));
  return String(Number(value.toFixed(Math.min(places, 20)))).replace("-", "−");
}

// Two digits of the doubt, the value to the same place.
function withDoubt(value, doubt) {
  if (value === null) return "—";
  if (!doubt) return shortNumber(value, 6);
  const places = 1 - Math.floor(Math.log10(doubt));
  if (places > 8 || Math.abs(value) >= 1e7) return `${shortNumber(value)} ± ${shortNumber(doubt, 2)}`;
  const step = 10 ** -Math.min(places, 0), digits = Math.max(places, 0);
  const text = (number) => (Math.round(number / step) * step).toFixed(digits);
  return (places < 0 ? `${text(value)} ± ${text(doubt)}` : `${value.toFixed(digits)} ± ${doubt.toFixed(digits)}`).replace(/-/g, "−");
}

