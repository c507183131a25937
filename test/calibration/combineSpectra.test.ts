/** Stacks of frames with known light: bias, error bars, hits, lines that differ a little, frames that do not belong. */
import { describe, expect, it } from "vitest";
import { combineSpectra } from "../../src/calibration/combineSpectra.js";
import { Flag } from "../../src/extraction/spectra.js";
import { kill, spectraOf } from "./products.js";
import { type FrameTruth, frameOf, mean, productOf, READ_VARIANCE } from "./stacks.js";

const size: [number, number] = [24, 300];
const n = size[0] * size[1];
const nx = size[1];
const at = (i: number): [number, number] => [Math.floor(i / nx), i % nx];

describe("sixteen frames at 10 e⁻", () => {
  const trials = Array.from({ length: 4 }, (_, trial) => {
    const frames = Array.from({ length: 16 }, (_, i) => frameOf([30, 500], () => 10, `ten ${trial} ${i}`));
    return { frames, combined: combineSpectra(frames) };
  });
  /** σ of the mean of 16. */
  const sigma = Math.sqrt((READ_VARIANCE + 10) / 16);

  it("have a bias below 0.1 σ of their combination, and weights of each value's own variance six times that", () => {
    const ours = mean(trials.map(({ combined }) => (mean(combined.spectra.flux) - 10) / sigma));
    const own = mean(
      trials.map(({ frames }) => {
        const [top, bottom] = [new Float64Array(15000), new Float64Array(15000)];
        for (const { spectra } of frames) {
          spectra.flux.forEach((value, i) => {
            top[i] += value / spectra.variance[i];
            bottom[i] += 1 / spectra.variance[i];
          });
        }
        return (mean(top.map((value, i) => value / bottom[i])) - 10) / sigma;
      }),
    );
    // Their statistical error: 1/√60000 of noise, and 0.5 % of 10 e⁻ in the scale of each trial's first frame: 0.02 in all.
    expect(Math.abs(ours)).toBeLessThan(0.1);
    expect(own).toBeLessThan(-0.5);
  });

  it("scatter as the combined variance says, which is that of the light they share", () => {
    for (const { combined } of trials) {
      const { flux, variance } = combined.spectra;
      const centre = mean(flux);
      const pull = Math.sqrt(mean(flux.map((value, i) => (value - centre) ** 2 / variance[i])));
      expect(Math.abs(pull - 1)).toBeLessThan(4 / Math.sqrt(2 * 15000));
      expect(Math.sqrt(mean(variance)) / sigma).toBeCloseTo(1, 1);
      expect(mean(combined.spectra.chi2)).toBeCloseTo(1, 1);
      // Skewed as Poisson numbers are: 5 σ are hardly ever reached.
      expect(Math.max(...combined.frames.map(({ rejectedShare }) => rejectedShare))).toBeLessThan(1e-4);
    }
  });
});

const LINE = (x: number, centre: number, sigma = 0.93) => Math.exp(-0.5 * ((x - centre) / sigma) ** 2);
/** Continua from 20 to 2000 e⁻ and lines up to 60 000. */
const field = (k: number, x: number) =>
  20 * (1 + k) ** 1.5 + 6e4 * LINE(x, 80.3) + 500 * (1 + k) * LINE(x, 150 + k / 3) + 3e4 * LINE(x, 220.8);

describe("three frames", () => {
  it("lose their cosmic-ray hits and next to nothing else", () => {
    const hits = Array.from({ length: 400 }, (_, j): [number, number, number] => [
      (5 * j) % 24,
      (17 * j + 3) % 300,
      400 + 40 * j,
    ]);
    const frames = [{}, { hits, scale: 0.8 }, { scale: 1.3 }].map((truth, i) =>
      frameOf(size, field, `hit ${i}`, truth),
    );
    const { spectra, nFrames, frames: shares } = combineSpectra(frames);
    const isHit = new Map(hits.map(([k, x, electrons]) => [k * nx + x, electrons]));
    let [missed, strong, falsely] = [0, 0, 0];
    for (let i = 0; i < n; i++) {
      const [k, x] = at(i);
      const rejected = 3 - nFrames[i];
      const electrons = isHit.get(i);
      if (electrons === undefined) {
        const beside = isHit.has(i - 1) || isHit.has(i + 1);
        if (!beside) falsely += rejected;
        continue;
      }
      // Strong: ten times the noise, and a third of the range of the light nearby, which lines may differ by.
      const levels = [-2, -1, 0, 1, 2].map((d) => field(k, x + d));
      if (electrons < 10 * Math.sqrt(READ_VARIANCE + field(k, x)) + 0.5 * (Math.max(...levels) - Math.min(...levels)))
        continue;
      strong++;
      if (rejected === 0) missed++;
      else expect(spectra.flags[i] & Flag.cosmicRay).toBe(1);
    }
    expect(strong).toBeGreaterThan(250);
    expect(missed).toBe(0);
    expect(falsely).toBeLessThanOrEqual(2);
    expect(shares[0].rejectedShare).toBeLessThan(2e-4);
    expect(shares[1].scale).toBeCloseTo(0.8, 1);
    const pulls = spectra.flux.map((value, i) => (value - field(...at(i))) / Math.sqrt(spectra.variance[i]));
    // The scale of all hangs on the first frame's noise; 3e-4 of 6e4 e⁻ is a tenth of σ there.
    expect(Math.abs(Math.sqrt(mean(pulls.map((pull) => Math.min(pull * pull, 25)))) - 1)).toBeLessThan(0.05);
  });

  it("keep their lines where these differ in place and width", () => {
    const wider = (k: number, x: number) =>
      20 * (1 + k) ** 1.5 +
      (6e4 / 1.05) * LINE(x, 80.3, 0.93 * 1.05) +
      500 * (1 + k) * LINE(x, 150 + k / 3) +
      3e4 * LINE(x, 220.8);
    const frames = [{}, { shift: 0.1 }, { shift: -0.08, light: wider }].map((truth, i) =>
      frameOf(size, field, `lines ${i}`, truth),
    );
    const { frames: shares, nFrames, warnings } = combineSpectra(frames);
    for (let k = 0; k < 24; k++) {
      for (const x of [79, 80, 81, 82, 220, 221, 222]) expect(nFrames[k * nx + x], `${k} ${x}`).toBe(3);
    }
    expect(Math.max(...shares.map(({ rejectedShare }) => rejectedShare))).toBeLessThan(3e-4);
    // And the shift is seen, and told where no wavelengths could mend it.
    expect(shares[1].lineShift).toBeCloseTo(0.1, 1);
    expect(shares[2].lineShift).toBeCloseTo(-0.08, 1);
    expect(warnings.filter((one) => /lines lie 0\.\d+ ± 0\.0\d+ px from the first frame's/.test(one)).length).toBe(1);
  });

  it("take the sky along on the first frame's exposure", () => {
    const frames = [{ sky: 40 }, { sky: 90, scale: 2 }, { sky: 40 }].map((truth, i) =>
      frameOf(size, field, `sky ${i}`, truth),
    );
    const { sky, spectra } = combineSpectra(frames);
    // Σ w·sky ÷ Σ w·s with w = s/v, v = 25 + s·f + sky.
    const f = field(3, 10);
    const w = [1, 2, 1].map((s, i) => s / (READ_VARIANCE + s * f + [40, 90, 40][i]));
    const expected = (w[0] * 40 + w[1] * 90 + w[2] * 40) / (w[0] + 2 * w[1] + w[2]);
    expect(sky![3 * nx + 10] / expected).toBeCloseTo(1, 1);
    expect(spectra.variance[3 * nx + 10] * (w[0] + 2 * w[1] + w[2])).toBeCloseTo(1, 1);
  });
});

describe("a combination", () => {
  it("has the covariance of next fibres, fewer frames where some have no value, and none where none has", () => {
    const frames = Array.from({ length: 3 }, (_, i) => {
      const spectra = spectraOf(
        4,
        60,
        (k, x) => 1000 + k + x + i,
        () => 30,
      );
      kill(spectra, 2);
      return productOf(`c${i}`, spectra);
    });
    frames[0].spectra.flags[5] = Flag.saturated;
    frames[1].spectra.flux[6] = Number.NaN;
    frames[2].spectra.flags[7] = Flag.badPixel;
    for (const { spectra } of frames) spectra.flags[8] = Flag.weightLost;
    const { spectra, nFrames } = combineSpectra(frames);
    expect([...nFrames.subarray(4, 10)]).toEqual([3, 2, 2, 3, 0, 3]);
    expect([...spectra.flags.subarray(4, 10)]).toEqual([0, 0, 0, Flag.badPixel, Flag.weightLost, 0]);
    expect(spectra.flux[8]).toBeNaN();
    // Three of equal weight: a third of the variance, and of the covariance −0.1.
    expect(spectra.variance[20]).toBeCloseTo(10, 1);
    expect(spectra.neighbourCovariance[20]).toBeCloseTo(-0.1 / 3, 3);
    expect(spectra.neighbourCovariance[60 + 20]).toBeNaN();
    expect(spectra.flags[2 * 60 + 3]).toBe(Flag.dead);
    expect(spectra.flux[2 * 60 + 3]).toBeNaN();
  });

  const refusal = (frames: ReturnType<typeof frameOf>[]) => () => combineSpectra(frames);
  const plain = (name: string, truth: FrameTruth = {}) => frameOf(size, field, name, truth);

  it("of frames that do not belong together is refused by name", () => {
    const other: FrameTruth = { light: (k, x) => field((7 * k + 11) % 24, x) };
    expect(refusal([plain("a"), plain("b"), plain("c", other)])).toThrow(
      /^c: the fibres' light scatters by \d+ % against the other frames, so that this looks like another field; leave out what does not belong, or combine all the same with --trust-field\.$/,
    );
    expect(refusal([plain("a"), plain("b", other)])).toThrow(/^b: the fibres' light scatters by \d+ % against a, /);
    expect(combineSpectra([plain("a"), plain("b"), plain("c", other)], { trustField: true }).frames).toHaveLength(3);
    expect(refusal([plain("a")])).toThrow("One file of spectra was given; give two or more to combine.");
    const dim = plain("dim", { scale: 0.004, seconds: 900 });
    expect(refusal([dim, plain("b"), plain("c")])).toThrow(
      /^dim: it has 0\.\d+ % of the light of the brightest frame, and all are scaled to it; leave it out, or name another first\.$/,
    );
  });

  it("of frames not made alike is refused by name", () => {
    const [a, b, twin] = [plain("a"), plain("b"), plain("twin")];
    twin.checksum = "b";
    expect(refusal([a, b, twin])).toThrow(
      "twin: it holds the same spectra as b; give each exposure once, or it would count twice.",
    );
    expect(refusal([a, { ...b, rebinned: true }])).toThrow("b: these spectra were rebinned; combine");
    expect(refusal([a, { ...b, spectra: { ...b.spectra, method: "boxcar" } }])).toThrow(
      "b: extracted as boxcar, cross-talk corrected, but a as joint; extract all frames alike.",
    );
    expect(refusal([a, plain("s", { sky: 5 })])).toThrow(
      "s: its sky subtraction (HDU SKY), but a has no; calibrate all frames alike.",
    );
    expect(refusal([a, frameOf([24, 299], field, "short")])).toThrow("short: 24 × 299 points, but a has 24 × 300;");
  });

  it("warns of cloud, of another object's name, and of a frame too faint to scale", () => {
    const cloudy = plain("cloudy", { scale: 0.2, seconds: 900 });
    cloudy.primaryHeader.set("OBJECT", "M 2");
    const { warnings } = combineSpectra([plain("a"), plain("b"), cloudy]);
    expect(warnings).toEqual([
      "cloudy: OBJECT is 'M 2', but '' in a; are they of one field?",
      "cloudy: 20 % of the usual light per second; cloud, or a telescope off its field?",
    ]);
    const dark = [0, 1].map((i) => frameOf(size, () => 0, `dark ${i}`));
    expect(combineSpectra(dark).warnings).toContain(
      "dark 1: too little light to scale it by; the exposure times were taken.",
    );
  });
});
