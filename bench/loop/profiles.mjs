// Profiles for the loop: Gaussians integrated over pixels at four nodes of a block of 16 columns, and a cubic between
// them, as the kernel has it. The series' polynomials are evaluated once a node for all fibres.
import { blockNodes, nodeShares } from "../../dist/reference/profile.js";
import { erf } from "./erf.mjs";

const nNode = 4;

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
      const y0 = series(trace, k * nTrace, nTrace, polynomials, 0);
      const y1 = series(trace, k * nTrace, nTrace, polynomials, 1);
      const y2 = series(trace, k * nTrace, nTrace, polynomials, 2);
      const y3 = series(trace, k * nTrace, nTrace, polynomials, 3);
      const first = Math.min(Math.max(Math.floor((y0 + y1 + y2 + y3) / 4 + 0.5) - halfWindow, -nWindow), ny);
      start[k] = first;
      nodeCentre[4 * k] = y0 - first;
      nodeCentre[4 * k + 1] = y1 - first;
      nodeCentre[4 * k + 2] = y2 - first;
      nodeCentre[4 * k + 3] = y3 - first;
      for (let node = 0; node < nNode; node++) {
        const scale = Math.SQRT1_2 / series(width, k * nWidth, nWidth, polynomials, node);
        gaussianInto(nodeWeights, (4 * k + node) * nWindow, nodeCentre[4 * k + node], scale, nWindow);
      }
    }
  }

  /** Weights of all fibres in column `offset` of the block. @param {number} offset */
  openColumn(offset) {
    const { nWindow, nodeWeights, weights } = this;
    const [s0, s1, s2, s3] = this.shares[offset];
    const [n1, n2, n3] = [nWindow, 2 * nWindow, 3 * nWindow];
    let from = 0;
    for (let at = 0; at < weights.length; from += n3) {
      for (let i = 0; i < nWindow; i++, at++, from++) {
        weights[at] =
          s0 * nodeWeights[from] +
          s1 * nodeWeights[from + n1] +
          s2 * nodeWeights[from + n2] +
          s3 * nodeWeights[from + n3];
      }
    }
  }

  /** Fibre k's centre in column `offset`, counted from its window's first row. @param {number} k @param {number} offset */
  centre(k, offset) {
    const [s0, s1, s2, s3] = this.shares[offset];
    const { nodeCentre } = this;
    return (
      s0 * nodeCentre[4 * k] + s1 * nodeCentre[4 * k + 1] + s2 * nodeCentre[4 * k + 2] + s3 * nodeCentre[4 * k + 3]
    );
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

/** P_0 … P_{n−1}(t) into out[4·j + node]. */
function legendreInto(out, node, t, n) {
  let below = 1;
  let here = t;
  out[node] = 1;
  for (let j = 1; j < n; j++) {
    out[4 * j + node] = here;
    const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
    below = here;
    here = above;
  }
}

function series(coef, from, n, polynomials, node) {
  let sum = coef[from];
  for (let j = 1; j < n; j++) sum += coef[from + j] * polynomials[4 * j + node];
  return sum;
}
