import { describe, expect, it } from "vitest";
import { extractFrame } from "../../src/extraction/extract.js";
import { measureMisfit } from "../../src/extraction/misfit.js";
import { openFrame } from "../../src/extraction/settle.js";
import type { GroupRows } from "../../src/kernels/extraction.js";
import { loadKernels } from "../../src/kernels/module.js";
import { MaskBit } from "../../src/reference/bits.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { normalDeviate, seeded } from "../scene.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";

const kernels = await loadKernels();
const kappa = 5;

/** Groups of two columns of 500 rows, their light 20 000 e⁻ with noise; `miss(i)`: share by which pixel i exceeds its model. */
function groups(miss: (i: number, next: () => number) => number, noise = 1) {
  const next = seeded(5);
  let asked = 0;
  const inspect = (x0: number): GroupRows => {
    asked++;
    expect(x0 % 16).toBe(0);
    const [nLane, nRow] = [2, 500];
    const model = new Float64Array(nLane * nRow).fill(20_000);
    const light = model.map((m, i) => m * (1 + miss(i, next)) + noise * Math.sqrt(m) * normalDeviate(next));
    return {
      ...{ nLane, nColumn: 2, model, light },
      reach: model.slice(),
      inverseVariance: model.map((m) => 1 / m),
    };
  };
  return { inspect, asked: () => asked };
}

describe("how well profiles fit, from rows of residuals", () => {
  it("is the floor where noise explains all", () => {
    const bench = groups(() => 0);
    expect(measureMisfit(bench, 1024, 16, kappa, 0.002)).toBe(0.002);
    expect(bench.asked()).toBe(32);
  });

  it("is such that κ·ε covers all but two in a thousand of the excesses, and half as much again", () => {
    // Excesses uniform from 0 to 12 % of the light: their 0.998 quantile is 0.11976; noise at the threshold, 5·0.7 % = 3.5 %,
    // goes off in quadrature: √(0.11976² − 0.0354²) = 0.1144. Noise itself blurs the quantile by some 0.7 %.
    const found = measureMisfit(
      groups((_, next) => 0.12 * next()),
      1024,
      16,
      kappa,
      0.002,
    );
    expect(Math.abs(found / ((1.5 * 0.1144) / kappa) - 1)).toBeLessThan(0.1);
  });

  it("does not grow by cosmic rays, one pixel in a thousand, nor by lack of light", () => {
    const rays = groups((i) => (i % 1000 === 7 ? 3 : 0));
    expect(measureMisfit(rays, 1024, 16, kappa, 0.002)).toBe(0.002);
    const lacking = groups((_, next) => -0.12 * next());
    expect(measureMisfit(lacking, 1024, 16, kappa, 0.002)).toBe(0.002);
  });

  it("listens to bright pixels alone, and to none when they are too few", () => {
    const faint = groups((_, next) => 0.5 * next());
    const dim = (x0: number): GroupRows => {
      const rows = faint.inspect(x0);
      return { ...rows, reach: rows.reach.map(() => 5000) }; // σ of 141 e⁻ is over 2 % of the light nearby
    };
    expect(measureMisfit({ inspect: dim }, 1024, 16, kappa, 0.003)).toBe(0.003);
    const few = (x0: number): GroupRows => {
      const rows = faint.inspect(x0);
      return { ...rows, inverseVariance: rows.inverseVariance.map((w, i) => (i < 3 ? w : 0)) };
    };
    expect(measureMisfit({ inspect: few }, 1024, 16, kappa, 0.003)).toBe(0.003);
  });
});

/** Emission lines of up to 1e5 e⁻ on every fibre; no cosmic ray. */
const exposure = simulateExposure(
  parseScene(
    SCENES.clean
      .replace("size = [400, 330]", "size = [320, 330]")
      .replace("faintest = 10", "emission_share = 1\nfaintest = 10"),
    "lines",
  ),
  "sci_01",
);
const frame = frameFromTruth(exposure, 3);
const right = tramlinesFromTruth(exposure);

/** The right tramlines moved, or with their widths changed. */
function wrong(moved: number, wider: number): Tramlines {
  const n = right.degree + 1;
  return {
    ...right,
    legendre: right.legendre.map((c, i) => (i % n === 0 ? c + moved : c)),
    profile: { ...right.profile, sigma: right.profile.sigma.map((s) => s * wider) },
  } as Tramlines;
}

function errorOf(tramlines: Tramlines): number {
  return openFrame(kernels, frame, tramlines, { background: false }).profileError;
}

describe("how well profiles fit a frame", () => {
  it("stays at its floor with the true profiles, and grows with every pixel that they are off", () => {
    const [exact, slightly, far] = [0, 0.05, 0.2].map((moved) => errorOf(wrong(moved, 1)));
    expect(exact).toBeLessThan(0.003);
    // A Gaussian of σ = 1.02 px moved by δ misses by 0.24·δ/σ of its light at ± σ: 1.2 % at 0.05 px, of light nearby that is
    // somewhat more than the fibre's own; /5 · 1.5.
    expect(slightly).toBeGreaterThan(1.3 * exact);
    expect(far).toBeGreaterThan(3 * slightly);
    expect(far).toBeLessThan(0.06);
    expect(errorOf(wrong(0, 1.15))).toBeGreaterThan(2 * exact);
  });

  for (const [name, tramlines, most] of [
    ["the true profiles", right, 4],
    ["profiles 0.2 px off", wrong(0.2, 1), 40],
    ["profiles 15 % too narrow", wrong(0, 0.87), 40],
  ] as const) {
    it(`no line is eaten with ${name}: of 105 600 pixels without any ray at most ${most} are rejected`, async () => {
      const { rejected, spectra } = await extractFrame(frame, tramlines, { shift: false, background: false });
      let taken = 0;
      for (const bits of rejected) if (bits & (MaskBit.cosmic | MaskBit.grown)) taken++;
      expect(taken).toBeLessThanOrEqual(most);
      const { truth } = exposure;
      const peaks = truth.lines.filter(({ electrons, x }) => electrons > 3000 && x > 3 && x < 316);
      expect(peaks.length).toBeGreaterThan(20);
      const eaten = peaks.filter(({ fibre, x }) => (spectra.flags[fibre * truth.nx + Math.round(x)] & 1) !== 0);
      expect(eaten.length).toBeLessThanOrEqual(Math.floor(peaks.length / 50));
    });
  }

  it("hits are found all the same with the true profiles", async () => {
    const hit = { ...frame, electrons: frame.electrons.slice() };
    const places = Array.from({ length: 60 }, (_, i) => (11 + ((i * 47) % 308)) * 320 + ((i * 89) % 320));
    for (const at of places) hit.electrons[at] += 4000 + 3 * Math.sqrt(Math.max(0, hit.electrons[at])) * 5;
    const { rejected } = await extractFrame(hit, right, { shift: false, background: false });
    const found = places.filter((at) => (rejected[at] & MaskBit.cosmic) !== 0).length;
    expect(found).toBeGreaterThanOrEqual(55);
  });
});
