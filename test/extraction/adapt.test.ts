import { beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { adaptTramlines } from "../../src/extraction/adapt.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import { scoreByDecade } from "../../src/report/truth.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { chooseProfile } from "../../src/tramlines/profiles.js";
import { linesOf } from "../../src/tramlines/profileTable.js";
import { measureShift } from "../../src/tramlines/shift.js";
import type { ShapeProfile, Tramlines } from "../../src/tramlines/tramlines.js";
import { benchScene, frameOf, weightErrors } from "../tramlines/shape/bench.js";
import { tramlinesFromTruth } from "./fromTruth.js";

/** A night on which the light moved by −0.3 px and spread by 4e-4 per pixel after the flat. */
const scene = benchScene((text) => text.replace("shift = 0.05", "shift = -0.3\nstretch = 4e-4"));

let kernels: Kernels;
let tramlines: Tramlines;
let gaussian: Tramlines;
let active: number[];
beforeAll(async () => {
  kernels = await loadKernels();
  const flats = ["fflat_01", "fflat_02"].map((name) => simulateExposure(scene, name));
  gaussian = tramlinesFromTruth(flats[0]);
  tramlines = (await chooseProfile(flats.map(frameOf), gaussian, "empirical")).tramlines;
  active = tramlines.state.flatMap((state, k) => (state === "dead" ? [] : [k]));
});

const exposure = simulateExposure(scene, "sci_02");

/** Of the weights against the truth of the moved exposure. */
function errorsOf(adapted: Tramlines) {
  const table = (adapted.profile as ShapeProfile).shape;
  return weightErrors({ lines: linesOf(adapted, active), table }, exposure.truth, active);
}

describe("tramlines and profile made a frame's own", () => {
  it("sit where its light sits, and fit it four times and more as well as the flat's", () => {
    const adapted = adaptTramlines(kernels, frameOf(exposure), tramlines, {});
    expect(adapted.warnings).toEqual([]);
    expect(adapted.refined).toBe(true);
    const [c0, c1, c2] = adapted.shift!.coefficients;
    expect(Math.abs(c0 + 0.3)).toBeLessThan(0.003);
    expect(Math.abs(c1)).toBeLessThan(0.004);
    expect(Math.abs(c2 - (4e-4 * 199) / 2)).toBeLessThan(0.005);
    expect(errorsOf(tramlines).core.rms).toBeGreaterThan(0.02);
    expect(errorsOf(adapted.tramlines).core.rms).toBeLessThan(0.001);
  });

  it("are moved alone when the profile is to stay, and refined alone when they are to stay", () => {
    const frame = frameOf(exposure);
    const moved = adaptTramlines(kernels, frame, tramlines, { refine: false });
    expect(moved.refined).toBe(false);
    expect(moved.tramlines.profile).toBe(tramlines.profile);
    expect(errorsOf(moved.tramlines).core.rms).toBeLessThan(0.0015);
    const refined = adaptTramlines(kernels, frame, tramlines, { shift: false });
    expect(refined.shift).toBeNull();
    expect(refined.tramlines.legendre).toBe(tramlines.legendre);
    expect((refined.tramlines.profile as ShapeProfile).shape.values).not.toEqual(
      (tramlines.profile as ShapeProfile).shape.values,
    );
    const neither = adaptTramlines(kernels, frame, tramlines, { shift: false, refine: false });
    expect(neither.tramlines).toBe(tramlines);
  });

  it("leave the flat's as they were", () => {
    const profile = tramlines.profile as ShapeProfile;
    const before = [tramlines.legendre, profile.shape.values, profile.known.best, profile.known.information];
    const copies = before.map((values) => values.slice());
    adaptTramlines(kernels, frameOf(exposure), tramlines, {});
    before.forEach((values, i) => {
      expect(values.every((value, at) => value === copies[i][at])).toBe(true);
    });
  });

  it("do not refine Gaussians, which have nothing to refine", () => {
    const adapted = adaptTramlines(kernels, frameOf(exposure), gaussian, {});
    expect(adapted.refined).toBe(false);
    expect(adapted.tramlines.profile).toBe(gaussian.profile);
    expect(adapted.shift!.coefficients[0]).toBeLessThan(-0.25);
  });

  it("find their shift by an arc's few lines, though the columns that are looked at first are dark", () => {
    const frame = frameOf(exposure);
    // Light in 80 columns of 300, away from the six places of eight that a sample of twelve groups lies on.
    const lines = [
      [30, 60],
      [185, 212],
      [232, 258],
    ];
    const isLit = (x: number) => lines.some(([from, to]) => x >= from && x < to);
    const electrons = frame.electrons.map((light, i) => (isLit(i % frame.nx) ? light : 3 * Math.sin(17 * i)));
    const arc: Frame = { ...frame, name: "arc", electrons };
    expect(measureShift(kernels, arc, gaussian)).toBeNull();
    const { shift, warnings } = adaptTramlines(kernels, arc, gaussian, { background: false });
    expect(warnings.filter((one) => one.includes("too little light"))).toEqual([]);
    // As the whole frame has it, which a Gaussian profile sees to a few hundredths.
    const whole = adaptTramlines(kernels, frame, gaussian, { background: false }).shift!;
    expect(Math.abs(shift!.coefficients[0] - whole.coefficients[0])).toBeLessThan(0.02);
    expect(Math.abs(shift!.coefficients[0] + 0.3)).toBeLessThan(0.05);
  });

  it("say by name that a dark frame cannot tell, and stay", () => {
    const frame = frameOf(exposure);
    const dark: Frame = { ...frame, electrons: frame.electrons.map((_, i) => 3 * Math.sin(17 * i)) };
    const adapted = adaptTramlines(kernels, dark, tramlines, {});
    expect(adapted.shift).toBeNull();
    expect(adapted.tramlines.legendre).toBe(tramlines.legendre);

    expect(adapted.warnings.length).toBe(1);
    expect(adapted.warnings[0]).toMatch(
      /^sci_02: too little light to measure its shift against the flat, so none is applied; spectra are right only if nothing moved/,
    );
  });
});

describe("spectra of a frame whose light moved", () => {
  it("are right once tramlines follow: bias and pulls from 100 e⁻ up, and wrong when they do not", async () => {
    const frame = frameOf(exposure);
    const score = async (options: object) =>
      scoreByDecade((await extractFrame(frame, tramlines, options)).spectra, exposure.truth).filter(
        ({ from }) => from === 1e3 || from === 1e4,
      );
    const followed = await score({});
    const left = await score({ shift: false, refine: false });
    expect(followed.map(({ from }) => from)).toEqual([1e3, 1e4]);
    for (const { bias, pull } of followed) {
      expect(Math.abs(bias)).toBeLessThan(0.01);
      expect(pull).toBeLessThan(1.25);
    }
    expect(Math.max(...left.map(({ pull }) => pull))).toBeGreaterThan(2);
  });
});
