/** With true profiles on a clean frame, joint extraction must reach what theory allows: no bias, honest errors, and the
 * Cramér–Rao variance (Rao 1945; no unbiased estimator has less than (AᵀN⁻¹A)⁻¹). */
import { beforeAll, describe, expect, it } from "vitest";
import { extractFrame } from "../../src/extraction/extract.js";
import { factorBand, inverseBand } from "../../src/reference/banded.js";
import { median } from "../../src/reference/median.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";

const readNoise = 3;
const seeds = Array.from({ length: 16 }, (_, i) => 7 + i);

interface Point {
  flux: number;
  error: number;
  variance: number;
  /** Cramér–Rao bounds: variance, and covariance with the fibre above. */
  bound: number;
  boundAbove: number;
  errorAbove: number;
  covarianceAbove: number;
}

let points: Point[] = [];

beforeAll(async () => {
  for (const seed of seeds) points = points.concat(await pointsOf(seed));
}, 240_000);

async function pointsOf(seed: number): Promise<Point[]> {
  const scene = parseScene(SCENES.clean.replace("seed = 7", `seed = ${seed}`), "clean");
  const exposure = simulateExposure(scene, "sci_01");
  const { truth } = exposure;
  const { spectra } = await extractFrame(frameFromTruth(exposure, readNoise), tramlinesFromTruth(exposure), {
    cosmicRays: false,
    background: false,
  });
  const expected = truth.expectedElectrons();
  const points: Point[] = [];
  for (let x = 0; x < truth.nx; x++) {
    const bound = cramerRao(truth, expected, x);
    for (let k = 0; k < truth.nFibre; k++) {
      const [at, above] = [k * truth.nx + x, (k + 1) * truth.nx + x];
      if (!truth.lit[k]) continue;
      points.push({
        flux: truth.flux[at],
        error: spectra.flux[at] - truth.flux[at],
        variance: spectra.variance[at],
        bound: bound[2 * k],
        boundAbove: k + 1 < truth.nFibre && truth.lit[k + 1] ? bound[2 * (k + 1) + 1] : Number.NaN,
        errorAbove: k + 1 < truth.nFibre ? spectra.flux[above] - truth.flux[above] : Number.NaN,
        covarianceAbove: spectra.neighbourCovariance[at],
      });
    }
  }
  return points;
}

/** (AᵀN⁻¹A)⁻¹ of one column from the simulator's own profiles and noise: [nFibre × 2], variance and covariance below.
 * At this pitch nothing beyond the next fibre overlaps by more than 1e-8. */
function cramerRao(
  truth: ReturnType<typeof simulateExposure>["truth"],
  expected: Float64Array,
  x: number,
): Float64Array {
  const { nFibre, nx, ny } = truth;
  const band = new Float64Array(2 * nFibre);
  const profiles = Array.from({ length: nFibre }, (_, k) => (truth.lit[k] ? truth.truthProfile(k, x, 0, ny) : null));
  profiles.forEach((own, k) => {
    for (let y = 0; own !== null && y < ny; y++) {
      const weighted = own[y] / (readNoise ** 2 + expected[y * nx + x]);
      band[2 * k] += weighted * own[y];
      if (k > 0) band[2 * k + 1] += weighted * (profiles[k - 1]?.[y] ?? 0);
    }
  });
  factorBand(band, nFibre, 1);
  return inverseBand(band, nFibre, 1);
}

function mean(values: number[]): number {
  return values.reduce((sum, value) => sum + value, 0) / values.length;
}

const decades = [1, 2, 3, 4].map((i) => [10 ** i, 10 ** (i + 1)]);

describe("joint extraction with true profiles on a clean frame", () => {
  it.each(decades)("has no bias and honest errors from %d to %d e⁻ per column", (low, high) => {
    const inside = points.filter(({ flux }) => flux >= low && flux < high);
    expect(inside.length).toBeGreaterThan(5000);
    const pulls = inside.map(({ error, variance }) => error / Math.sqrt(variance));
    const centre = median(pulls);
    const robust = 1.4826 * median(pulls.map((pull) => Math.abs(pull - centre)));
    expect(Math.abs(robust - 1)).toBeLessThan(0.02);
    // Not the mean pull: quoted σ follows the noise, so that low fluctuations count double there.
    expect(Math.abs(mean(inside.map(({ error, bound }) => error / Math.sqrt(bound))))).toBeLessThan(0.02);
  });

  it.each(decades)("reaches the Cramér–Rao variance within sampling error from %d to %d e⁻", (low, high) => {
    const inside = points.filter(({ flux }) => flux >= low && flux < high);
    const excess = mean(inside.map(({ error, bound }) => (error * error) / bound)) - 1;
    // The mean of n squared normal deviates scatters by √(2/n); four of those.
    expect(Math.abs(excess)).toBeLessThan(4 * Math.sqrt(2 / inside.length));
  });

  it("quotes that variance, and the neighbours' covariance", () => {
    expect(Math.abs(mean(points.map(({ variance, bound }) => variance / bound)) - 1)).toBeLessThan(0.005);
    const pairs = points.filter(({ boundAbove }) => Number.isFinite(boundAbove));
    const quoted = pairs.reduce((sum, p) => sum + p.covarianceAbove / p.bound, 0);
    const theory = pairs.reduce((sum, p) => sum + p.boundAbove / p.bound, 0);
    const found = pairs.reduce((sum, p) => sum + (p.error * p.errorAbove) / p.bound, 0);
    expect(Math.abs(quoted / theory - 1)).toBeLessThan(0.01);
    expect(Math.abs(found / theory - 1)).toBeLessThan(0.35);
  });
});
