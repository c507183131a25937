/** What keeps frames from being combined, and what is said of those that are. Invented data. */
import { describe, expect, it } from "vitest";
import type { FrameShare } from "../../src/calibration/combineSpectra.js";
import { requireAlike, requireOneField, stackWarnings } from "../../src/calibration/frameAgreement.js";
import { spectraOf } from "./products.js";
import { productOf } from "./stacks.js";

const [nFibre, nx] = [4, 30];
const waves = (medium: "air" | "vacuum") => ({ medium, image: new Float64Array(nFibre * nx).fill(6000) });
const product = (name: string, parts: Parameters<typeof productOf>[2] = {}) =>
  productOf(
    name,
    spectraOf(nFibre, nx, () => 100),
    parts,
  );

const share = (name: string, change: Partial<FrameShare> = {}): FrameShare => ({
  ...{ name, scale: 1, error: 0.01, from: "light", scatter: 0.02, exposureSeconds: 900, weight: 0.3 },
  ...{ rejectedShare: 1e-3, usableShare: 1, apart: 0.01, moved: false, lineShift: 0, lineShiftError: 0.004 },
  ...change,
});
const said = (...changes: Partial<FrameShare>[]) => {
  const shares = changes.map((change, i) => share("abc"[i], change));
  return stackWarnings(
    shares.map(({ name }) => product(name)),
    shares,
    0.05,
  );
};

describe("frames not made alike", () => {
  it("are refused by name: another readout window, wavelengths on one side only, or in the other medium", () => {
    const moved = product("moved");
    moved.primaryHeader.set("TRAMGEOM", "4567");
    expect(() => requireAlike([product("a"), moved])).toThrow(
      "moved: another readout window than that of a; combine spectra of the same readout window.",
    );
    const air = product("air", { wavelengths: waves("air") });
    expect(() => requireAlike([air, product("b")])).toThrow(
      "b: no wavelengths (HDU WAVELENGTH), but air has its; calibrate all frames alike.",
    );
    expect(() => requireAlike([air, product("v", { wavelengths: waves("vacuum") })])).toThrow(
      "v: wavelengths in vacuum, but not so in air; calibrate all frames alike.",
    );
    expect(() => requireAlike([air, product("b", { wavelengths: waves("air") })])).not.toThrow();
  });

  it("are refused for cross-talk left in one of them", () => {
    const [a, b] = [product("a"), product("b")];
    for (const one of [a, b]) one.spectra = { ...one.spectra, method: "optimal" };
    b.spectra.crosstalkCorrected = false;
    expect(() => requireAlike([a, b])).toThrow(
      "b: extracted as optimal, cross-talk left in, but a as optimal, cross-talk corrected; extract all frames alike.",
    );
  });
});

describe("frames of one field", () => {
  const frames = ["a", "b", "c"].map((name) => ({ name })) as Parameters<typeof requireOneField>[0];
  const scales = (scatters: number[], scale = [1, 1, 1]) =>
    scatters.map((scatter, i) => ({ ...share("", { scatter, scale: scale[i] }), fibre: new Float64Array(nFibre) }));

  it("may scatter by half, and be 50 times as bright as the first, and no more", () => {
    expect(() => requireOneField(frames, scales([0, 0.49, 0.49], [1, 50, 0.01]))).not.toThrow();
    expect(() => requireOneField(frames, scales([0, 0.52, 0.71]))).toThrow(
      /^b, c: the fibres' light scatters by 71 % against the other frames, so that this looks like another field;/,
    );
    expect(() => requireOneField(frames.slice(0, 2), scales([0, 0.6]))).toThrow("scatters by 60 % against a,");
    expect(() => requireOneField(frames, scales([0, 0, 0], [1, 80, 2]))).toThrow(
      "a: it has 1.3 % of the light of the brightest frame, and all are scaled to it; leave it out, or name another first.",
    );
  });
});

describe("what is said of a stack", () => {
  it("is nothing when frames agree, however long each was exposed", () => {
    expect(said({}, { scale: 0.5, exposureSeconds: 450 }, { scatter: 0.14, rejectedShare: 0.029 })).toEqual([]);
  });

  it("is where scales come from other than light", () => {
    expect(said({}, { from: "exposure time" }, { from: "nothing" })).toEqual([
      "b: too little light to scale it by; the exposure times were taken.",
      "c: too little light to scale it by; it counts like the first.",
    ]);
  });

  it("is cloud, uneven light, and too many points rejected, of the frame that has them", () => {
    expect(said({}, { scale: 0.45 }, {})).toEqual([
      "b: 45 % of the usual light per second; cloud, or a telescope off its field?",
    ]);
    expect(said({}, {}, { scatter: 0.21, rejectedShare: 0.034 })).toEqual([
      "c: its fibres' light scatters by 21 % against the other frames; guiding, seeing, or another field?",
      "c: 3.4 % of its points were rejected, more than cosmic rays explain; look at it.",
    ]);
  });

  it("is lines that lie elsewhere, beyond the tolerance and their error, with what may mend it", () => {
    expect(said({}, { lineShift: 0.06, lineShiftError: 0.013 }, { lineShift: -0.049 })).toEqual([]);
    expect(said({}, { lineShift: 0.06, lineShiftError: 0.01 }, { lineShift: -0.07, apart: Number.NaN })).toEqual([
      "b: its lines lie 0.060 ± 0.010 px from the first frame's, which broadens the sum; its zero point is not what its wavelengths say.",
      "c: its lines lie -0.070 ± 0.004 px from the first frame's, which broadens the sum; calibrate the frames with --wavelengths, so that their light can be moved.",
    ]);
  });
});
