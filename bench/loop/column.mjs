// One column of the loop: data on rows, `margin` rows beyond each end of the frame; weights, fits, rejections.
import { MaskBit } from "../../dist/reference/bits.js";
import { leastShare } from "../../dist/reference/joint.js";
import { factor, invert, solve } from "./banded.mjs";

const clusterRows = 2;
const reachRows = 2;
const wingShare = 0.02;
const settledSigma = 0.1;

export class Column {
  /** @param {import("../../dist/reference/extract.js").ExtractionInput} input
   * @param {import("./profiles.mjs").Profiles} profiles */
  constructor(input, profiles) {
    const { nFibre, ny } = input;
    this.input = input;
    this.profiles = profiles;
    this.margin = profiles.nWindow;
    this.nRow = ny + 2 * this.margin;
    const rows = () => new Float64Array(this.nRow);
    const fibres = () => new Float64Array(nFibre);
    this.bits = new Uint8Array(this.nRow).fill(MaskBit.missing);
    this.light = rows();
    this.background = rows();
    this.fixed = rows().fill(1);
    this.inverseVariance = rows();
    /** light · inverseVariance */
    this.weightedLight = rows();
    this.model = rows();
    /** Weights of all fibres on the row. */
    this.covered = rows();
    /** Pixels that are not good, counted from row 0 up to and without this one. */
    this.lostBefore = new Int32Array(this.nRow + 1);
    /** Lowest fibre whose window reaches the row. */
    this.lowestFibre = new Int32Array(this.nRow);
    this.product = new Float64Array(profiles.nWindow);
    this.measured = new Uint8Array(nFibre);
    this.diagonal = fibres();
    this.flux = fibres();
    this.before = fibres();
    this.lastChange = fibres();
    // The system's diagonals, then its factors.
    this.m0 = fibres();
    this.m1 = fibres();
    this.m2 = fibres();
    this.variance = fibres();
    this.covariance = fibres();
    this.candidates = new Int32Array(this.nRow);
    this.excess = rows();
  }

  /** What the block's windows say of the rows. */
  openBlock() {
    const { lowestFibre, margin, nRow } = this;
    const { start, nWindow } = this.profiles;
    let k = 0;
    for (let row = 0; row < nRow; row++) {
      while (k < start.length && start[k] + margin + nWindow <= row) k++;
      lowestFibre[row] = k;
    }
  }

  /** First fit on the data's own noise, then rounds of rejection, variance from the model, and the fit again. */
  settle() {
    const { maxRounds, minRounds, kappa } = this.input;
    this.cover();
    this.weighData();
    this.fit();
    this.lastChange.fill(0);
    for (let round = 0; round < maxRounds; round++) {
      const nMarked = this.weighModel(kappa);
      if (round >= minRounds && nMarked === 0 && this.hasSettled()) return;
      this.before.set(this.flux);
      this.fit();
      for (let k = 0; k < this.flux.length; k++) this.lastChange[k] = this.flux[k] - this.before[k];
    }
  }

  hasSettled() {
    const { lastChange, diagonal } = this;
    for (let k = 0; k < lastChange.length; k++) {
      if (lastChange[k] * lastChange[k] * diagonal[k] > settledSigma * settledSigma) return false;
    }
    return true;
  }

  /** Variances and neighbours' covariances from the last fit's factors. */
  invert() {
    invert(this.m0, this.m1, this.m2, this.flux.length, this.variance, this.covariance);
  }

  weighData() {
    const { bits, light, background, fixed, inverseVariance, weightedLight, nRow } = this;
    for (let row = 0; row < nRow; row++) {
      const here = light[row] + background[row];
      const inverse = bits[row] === 0 ? 1 / (fixed[row] + Math.max(here, 0)) : 0;
      inverseVariance[row] = inverse;
      weightedLight[row] = light[row] * inverse;
    }
    this.countLost();
  }

  /** Inverse variances from the model and, in the same pass, rejections: the slack that a misfit of the profile adds can only
   * lower an excess, so that it is worked out only where the noise alone is exceeded. Returns how many were marked. */
  weighModel(kappa) {
    const { bits, light, background, fixed, inverseVariance, weightedLight, model, margin, nRow, candidates } = this;
    const limit = kappa > 0 ? kappa * kappa : Number.POSITIVE_INFINITY;
    let nCandidate = 0;
    for (let row = margin; row < nRow - margin; row++) {
      if (bits[row] !== 0) continue;
      const expected = model[row];
      const here = expected + background[row];
      const variance = fixed[row] + Math.max(here, 0);
      const inverse = 1 / variance;
      inverseVariance[row] = inverse;
      weightedLight[row] = light[row] * inverse;
      const excess = light[row] - expected;
      if (excess > 0 && excess * excess > limit * variance) candidates[nCandidate++] = row;
    }
    return nCandidate > 0 ? this.markWorst(nCandidate, limit) : 0;
  }

  markWorst(nCandidate, limit) {
    const { candidates, excess, bits, inverseVariance, weightedLight } = this;
    for (let c = 0; c < nCandidate; c++) excess[candidates[c]] = this.squaredExcess(candidates[c]);
    let nMarked = 0;
    for (let c = 0; c < nCandidate; c++) {
      const row = candidates[c];
      const own = excess[row];
      if (!(own > limit)) continue;
      let worst = true;
      for (let j = 1; j <= clusterRows; j++) if (excess[row - j] >= own || excess[row + j] > own) worst = false;
      if (!worst) continue;
      bits[row] |= MaskBit.cosmic;
      inverseVariance[row] = 0;
      weightedLight[row] = 0;
      nMarked++;
    }
    for (let c = 0; c < nCandidate; c++) excess[candidates[c]] = 0;
    if (nMarked > 0) this.countLost();
    return nMarked;
  }

  /** Squared excess over noise and misfit on a row that is good and above its model. */
  squaredExcess(row) {
    const { light, model, background, fixed } = this;
    const slack = this.input.profileError * this.lightInReach(row);
    const here = model[row] + background[row];
    const excess = light[row] - model[row];
    return (excess * excess) / (fixed[row] + Math.max(here, 0) + slack * slack);
  }

  /** The most light within two rows, and a share of that of the fibres about. */
  lightInReach(row) {
    const { flux, model, lowestFibre } = this;
    let near = 0;
    for (let j = row - reachRows; j <= row + reachRows; j++) near = Math.max(near, Math.abs(model[j]));
    let about = 0;
    const lowest = lowestFibre[row];
    const end = Math.min(lowest + this.input.bandwidth + 1, flux.length);
    for (let k = lowest; k < end; k++) about += Math.abs(flux[k]);
    return near + about * wingShare;
  }

  countLost() {
    const { inverseVariance, lostBefore, nRow } = this;
    let n = 0;
    for (let row = 0; row < nRow; row++) {
      lostBefore[row] = n;
      if (inverseVariance[row] === 0) n++;
    }
    lostBefore[nRow] = n;
  }

  cover() {
    const { covered, margin } = this;
    const { start, weights, nWindow } = this.profiles;
    covered.fill(0);
    for (let k = 0, at = 0; k < start.length; k++) {
      const first = margin + start[k];
      for (let i = 0; i < nWindow; i++, at++) covered[first + i] += weights[at];
    }
  }

  /** Normal equations with the present weights, fluxes, and their light on the rows. */
  fit() {
    const { m0, m1, m2, flux, diagonal } = this;
    this.normalEquations();
    diagonal.set(m0);
    factor(m0, m1, m2, flux.length);
    solve(m0, m1, m2, flux.length, flux);
    this.addUp();
  }

  normalEquations() {
    const { m0, m1, m2, flux, measured, product, margin, weightedLight, inverseVariance } = this;
    const { start, weights, nWindow } = this.profiles;
    const n = start.length;
    for (let k = 0; k < n; k++) {
      const first = margin + start[k];
      const own = k * nWindow;
      let norm = 0;
      let rhs = 0;
      for (let i = 0; i < nWindow; i++) {
        const weight = weights[own + i];
        const u = weight * inverseVariance[first + i];
        product[i] = u;
        norm += u * weight;
        rhs += weight * weightedLight[first + i];
      }
      const takesPart = this.isMeasured(k);
      measured[k] = takesPart ? 1 : 0;
      m0[k] = takesPart ? norm : 0;
      flux[k] = takesPart ? rhs : 0;
      m1[k] = takesPart && k > 0 && measured[k - 1] ? this.overlap(own - nWindow, start[k] - start[k - 1]) : 0;
      m2[k] = takesPart && k > 1 && measured[k - 2] ? this.overlap(own - 2 * nWindow, start[k] - start[k - 2]) : 0;
    }
  }

  /** Σ product · the weights of a lower fibre, which begin at `from`, over the rows that both windows share. */
  overlap(from, ahead) {
    const { product } = this;
    const { weights, nWindow } = this.profiles;
    let sum = 0;
    for (let i = 0, at = from + ahead; i < nWindow - ahead; i++, at++) sum += product[i] * weights[at];
    return sum;
  }

  isMeasured(k) {
    const first = this.margin + this.profiles.start[k];
    const { nWindow, weights } = this.profiles;
    if (this.lostBefore[first + nWindow] === this.lostBefore[first]) return true;
    let share = 0;
    for (let i = 0; i < nWindow; i++) if (this.inverseVariance[first + i] > 0) share += weights[k * nWindow + i];
    return share >= leastShare;
  }

  addUp() {
    const { model, flux, margin } = this;
    const { start, weights, nWindow } = this.profiles;
    model.fill(0);
    for (let k = 0, at = 0; k < start.length; k++) {
      const first = margin + start[k];
      const own = flux[k];
      for (let i = 0; i < nWindow; i++, at++) model[first + i] += own * weights[at];
    }
  }
}
