// Writes assembly/erf-table.ts: Taylor polynomials of erf about the middles of 24 cells of width 1/4 on [0, 6].
//
// With y = exp(−(c+h)²) = Σ a_n hⁿ, y′ = −2(c+h)y gives a_{n+1} = −2(c·a_n + a_{n−1})/(n+1), and
// erf(c+h) = erf(c) + 2/√π Σ a_n h^{n+1}/(n+1). erf(c) from its Maclaurin series (Abramowitz & Stegun 7.1.5).
// Fixed-point arithmetic in BigInt, 200 bits behind the point: every printed double is correctly rounded or one off.
import { writeFileSync } from "node:fs";

const BITS = 200n;
const ONE = 1n << BITS;
const CELLS = 24;
const WIDTH_INVERSE = 4n;
const TERMS = 16;

const times = (a, b) => (a * b) >> BITS;

function squareRoot(x) {
  let root = x;
  for (;;) {
    const next = (root + (x << BITS) / root) >> 1n;
    if (next === root || next === root + 1n) return root;
    root = next;
  }
}

// Machin's formula: π = 16 arctan(1/5) − 4 arctan(1/239).
function arctanInverse(n) {
  let power = ONE / n;
  let sum = power;
  for (let k = 1n; power !== 0n; k++) {
    power /= -(n * n);
    sum += power / (2n * k + 1n);
  }
  return sum;
}

function exponential(x) {
  let term = ONE;
  let sum = ONE;
  for (let k = 1n; term !== 0n && term !== -1n; k++) {
    term = times(term, x) / k;
    sum += term;
  }
  return sum;
}

const pi = 16n * arctanInverse(5n) - 4n * arctanInverse(239n);
const twoOverRootPi = (2n * ONE * ONE) / squareRoot(pi);

function errorFunction(x) {
  let power = x;
  let sum = x;
  for (let k = 1n; power !== 0n && power !== -1n; k++) {
    power = -times(times(power, x), x) / k;
    sum += power / (2n * k + 1n);
  }
  return times(twoOverRootPi, sum);
}

function toNumber(x) {
  const sign = x < 0n ? -1 : 1;
  let magnitude = x < 0n ? -x : x;
  if (magnitude === 0n) return 0;
  let exponent = 0;
  while (magnitude >= 1n << 60n) {
    magnitude >>= 1n;
    exponent++;
  }
  return sign * Number(magnitude) * 2 ** (exponent - Number(BITS));
}

function cell(i) {
  const c = (ONE * BigInt(2 * i + 1)) / (2n * WIDTH_INVERSE);
  const coefficients = [errorFunction(c)];
  let before = 0n;
  let here = times(twoOverRootPi, exponential(-times(c, c)));
  for (let n = 0; coefficients.length < TERMS; n++) {
    coefficients.push(here / BigInt(n + 1));
    const after = (-2n * (times(c, here) + before)) / BigInt(n + 1);
    before = here;
    here = after;
  }
  return coefficients.map(toNumber);
}

const rows = Array.from({ length: CELLS }, (_, i) => cell(i));
const numbers = rows.map((row) => row.map((x) => `  ${x},`).join("\n")).join("\n");
writeFileSync(
  new URL("../assembly/erf-table.ts", import.meta.url),
  `// Made by scripts/erf-table.mjs, which says how; do not edit.
// ${CELLS} cells of width 1/4 from 0 on, ${TERMS} coefficients each, lowest first, in powers of the distance from the cell's middle.
export const erfCells = ${CELLS};
export const erfTerms = ${TERMS};

// biome-ignore format: one number a line
export const erfTable: StaticArray<f64> = [
${numbers}
];
`,
);
