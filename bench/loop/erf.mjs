// The error function as one would write it for speed in JavaScript: a table, and Hermite's cubic between its points.
// Absolute error below 1e-10: cubic's remainder h⁴/384 · max|erf⁗|, h = 1/128.

const perUnit = 128;
const end = 6; // erfc(6) = 2e-17
const values = new Float64Array(end * perUnit + 2);
const slopes = new Float64Array(end * perUnit + 2); // × h

fillTable();

/** erf(x). @param {number} x */
export function erf(x) {
  const size = Math.abs(x);
  if (size >= end) return x > 0 ? 1 : -1;
  const at = size * perUnit;
  const cell = at | 0;
  const t = at - cell;
  const u = 1 - t;
  const low = values[cell];
  const rise = values[cell + 1] - low;
  const value = low + t * (t * (3 - 2 * t) * rise + u * (u * slopes[cell] - t * slopes[cell + 1]));
  return x > 0 ? value : -value;
}

/** erf from its slope, Simpson's rule on 8 steps a cell. */
function fillTable() {
  const slope = (/** @type {number} */ x) => (2 / Math.sqrt(Math.PI)) * Math.exp(-x * x);
  const h = 1 / perUnit;
  for (let i = 0; i < values.length; i++) {
    slopes[i] = h * slope(i * h);
    if (i === 0) continue;
    let sum = 0;
    for (let j = 0; j <= 8; j++) sum += (j === 0 || j === 8 ? 1 : j % 2 ? 4 : 2) * slope((i - 1 + j / 8) * h);
    values[i] = values[i - 1] + (sum * h) / 24;
  }
}
