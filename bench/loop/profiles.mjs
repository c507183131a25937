// Profiles for the loop: Gaussians integrated over pixels at six nodes of a block of columns, and a polynomial between
// them, as the kernel has it. The series' polynomials are evaluated once a node for all fibres.
import { blockNodes, nodeShares } from "../../dist/reference/profile.js";
import { erf } from "./erf.mjs";

const nNode = 6;

export class Profiles {
  /** @param {import("../../dist/reference/extract.js").ExtractionInput} input */
  constructor(input) {
    const { nFibre, halfWindow, blockColumns } = input;
    this.input = input;
    this.nWindow = 2 * halfWindow + 1;
    /** nFibre: first row of the window, counted from the frame's row 0. */
    this.start = new Int32Array(nFibre);
    this.nodeCentre = new Float64Array(nNode * nFibre);
    this.nodeWeights = new Float64Array(nNode * nFibre * this.nWindow);
    /** nFibre × nWindow: weights in the present column. */
    this.weights = new Float64Array(nFibre * this.nWindow);
    this.nodes = blockNodes(blockColumns);
    this.shares = Array.from({ length: blockColumns }, (_, offset) => nodeShares(blockColumns, offset));
    this.polynomials = new Float64Array(Math.max(input.nTrace, input.nWidth) * nNode);
  }

  /** Windows and nodes' weights of the block that begins with column `x0`. @param {number} x0 */
  openBlock(x0) {
    const { input, nWindow, start, nodeCentre, nodeWeights, polynomials } = this;
    const { nFibre, nTrace, nWidth, trace, width, halfWindow, ny, nx } = input;
    for (let node = 0; node < nNode; node++) {
      legendreInto(polynomials, node, (2 * (x0 + this.nodes[node])) / (nx - 1) - 1, Math.max(nTrace, nWidth));
    }
    for (let k = 0; k < nFibre; k++) {
      const at = nNode * k;
      let sum = 0;
      for (let node = 0; node < nNode; node++) {
        const y = series(trace, k * nTrace, nTrace, polynomials, node);
        nodeCentre[at + node] = y;
        sum += y;
      }
      const first = Math.min(Math.max(Math.floor(sum / nNode + 0.5) - halfWindow, -nWindow), ny);
      start[k] = first;
      for (let node = 0; node < nNode; node++) {
        nodeCentre[at + node] -= first;
        const scale = Math.SQRT1_2 / series(width, k * nWidth, nWidth, polynomials, node);
        gaussianInto(nodeWeights, (at + node) * nWindow, nodeCentre[at + node], scale, nWindow);
      }
    }
  }

  /** Weights of all fibres in column `offset` of the block. @param {number} offset */
  openColumn(offset) {
    const { nWindow, nodeWeights, weights } = this;
    const [s0, s1, s2, s3, s4, s5] = this.shares[offset];
    const [n1, n2, n3, n4, n5] = [nWindow, 2 * nWindow, 3 * nWindow, 4 * nWindow, 5 * nWindow];
    let from = 0;
    for (let at = 0; at < weights.length; from += n5) {
      for (let i = 0; i < nWindow; i++, at++, from++) {
        weights[at] =
          s0 * nodeWeights[from] +
          s1 * nodeWeights[from + n1] +
          s2 * nodeWeights[from + n2] +
          s3 * nodeWeights[from + n3] +
          s4 * nodeWeights[from + n4] +
          s5 * nodeWeights[from + n5];
      }
    }
  }

  /** Fibre k's centre in column `offset`, counted from its window's first row. @param {number} k @param {number} offset */
  centre(k, offset) {
    const shares = this.shares[offset];
    let sum = 0;
    for (let node = 0; node < nNode; node++) sum += shares[node] * this.nodeCentre[nNode * k + node];
    return sum;
  }
}

/** Weights of `n` pixels from 0 on into out[at …]; `scale`: 1 / (√2 σ). */
export function gaussianInto(out, at, centre, scale, n) {
  let below = erf((-0.5 - centre) * scale);
  for (let i = 0; i < n; i++) {
    const above = erf((i + 0.5 - centre) * scale);
    out[at + i] = 0.5 * (above - below);
    below = above;
  }
}

/** P_0 … P_{n−1}(t) into out[nNode·j + node]. */
function legendreInto(out, node, t, n) {
  let below = 1;
  let here = t;
  out[node] = 1;
  for (let j = 1; j < n; j++) {
    out[nNode * j + node] = here;
    const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
    below = here;
    here = above;
  }
}

function series(coef, from, n, polynomials, node) {
  let sum = coef[from];
  for (let j = 1; j < n; j++) sum += coef[from + j] * polynomials[nNode * j + node];
  return sum;
}
