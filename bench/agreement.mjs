// Do two extractions of one frame agree? Asked before anything is timed: whoever does less work is seen here.

/** @typedef {{ output: import("../dist/reference/extract.js").ExtractionOutput, rejected: Uint8Array }} Extracted */

/** Largest differences that single precision (4 lanes, or Float32 images) may make: flux in σ, variance and covariance as
 * shares of the variance, χ² as a share of itself. */
const bounds = { flux: 3e-4, variance: 5e-6, neighbourCovariance: 5e-6, chi2: 1e-4, background: 1e-6 };
/** In single precision a pixel at the threshold may fall to the other side; then its column's points differ, and its mark. */
const largestShare = 2e-5;

/** @param {string} name @param {Extracted} found @param {Extracted} expected
 * @throws Error that says what differs and where. */
export function requireAgreement(name, found, expected) {
  const [a, b] = [found.output, expected.output];
  const n = a.flux.length;
  const worst = { flux: 0, variance: 0, neighbourCovariance: 0, chi2: 0, background: 0 };
  let [nFar, where] = [0, ""];
  for (let i = 0; i < n; i++) {
    const variance = Number.isNaN(b.variance[i]) ? 1 : b.variance[i];
    const differences = {
      flux: difference(a.flux[i], b.flux[i]) / Math.sqrt(variance),
      variance: difference(a.variance[i], b.variance[i]) / variance,
      neighbourCovariance: difference(a.neighbourCovariance[i], b.neighbourCovariance[i]) / variance,
      chi2: difference(a.chi2[i], b.chi2[i]) / (1 + (b.chi2[i] || 0)),
      background: difference(a.background[i], b.background[i]) / (1 + Math.abs(b.background[i])),
    };
    let far = a.flags[i] === b.flags[i] ? "" : "flags";
    for (const [key, value] of Object.entries(differences)) if (value > bounds[key]) far = key;
    if (far !== "") {
      nFar++;
      where ||= `${far} of point ${i}: ${a[far][i]} and ${b[far][i]}`;
    } else for (const [key, value] of Object.entries(differences)) if (value > worst[key]) worst[key] = value;
  }
  if (nFar > largestShare * n) throw new Error(`${name}: ${nFar} of ${n} points differ, the first in ${where}.`);
  const nMark = found.rejected.reduce((sum, bits, i) => sum + (bits === expected.rejected[i] ? 0 : 1), 0);
  if (nMark > largestShare * found.rejected.length) throw new Error(`${name}: ${nMark} marks of pixels differ.`);
  return { worst, nFar, nMark };
}

/** Of two numbers; none where both are missing, all where one is. */
function difference(a, b) {
  if (Number.isNaN(a) || Number.isNaN(b)) return Number.isNaN(a) && Number.isNaN(b) ? 0 : Number.POSITIVE_INFINITY;
  return Math.abs(a - b);
}
