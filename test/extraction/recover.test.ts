/** The recovery test must pass the right profiles and fail wrong ones, on frames of an independent forward model. */
import { beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { type Recovery, recoverInjected } from "../../src/extraction/recover.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { BENCH, CLEAN, correctedFrame, empiricalLines, exposureOf, gaussianLines } from "./benchScene.js";
import { tramlinesFromTruth } from "./fromTruth.js";

function widened(tramlines: Tramlines, factor: number): Tramlines {
  const sigma = tramlines.profile.sigma.map((one) => one * factor);
  return { ...tramlines, profile: { ...tramlines.profile, sigma } };
}

function grades(recovery: Recovery, about: string): string[] {
  return recovery.verdict.findings.filter((one) => one.about === about).map(({ grade }) => grade);
}

const leak = (recovery: Recovery) => recovery.dark.find((one) => one.light === "injected" && one.distance === 1)!;
const told = (recovery: Recovery) => JSON.stringify(recovery, null, 1);

describe("on pure Gaussians", () => {
  let frame: Frame;
  let flat: Frame;
  let exact: Tramlines;
  beforeAll(() => {
    const science = exposureOf(CLEAN, "sci_01");
    frame = correctedFrame(science);
    flat = correctedFrame(exposureOf(CLEAN, "fflat_02"));
    const lines = tramlinesFromTruth(science);
    exact = { ...lines, profile: { ...lines.profile, relativeError: 0.002 } };
  });

  it("passes the true profiles: no bias, honest error bars, lines kept", async () => {
    const recovery = await recoverInjected(frame, exact, [flat]);
    expect(recovery.verdict.grade, told(recovery)).toBe("good");
    const telling = recovery.cells.filter(({ nPoint }) => nPoint > 1000);
    expect(telling.map(({ from }) => from)).toEqual(expect.arrayContaining([10, 100, 1000, 10_000]));
    for (const { bias, biasError, pull } of telling) {
      expect(Math.abs(bias)).toBeLessThan(0.001 + 3.5 * biasError);
      expect(Math.abs(pull - 1)).toBeLessThan(0.1);
    }
    // At the highest level the flat's light is known to better than a thousandth.
    expect(Math.abs(recovery.cells.at(-1)!.bias)).toBeLessThan(0.001);
    expect(Math.abs(leak(recovery).meanShare)).toBeLessThan(3e-4);
    expect(Math.max(...telling.map((cell) => cell.lineFlaggedShare))).toBeLessThan(0.01);
    // The dead fibre is no. 5: a place beside it must be among those looked at.
    expect(leak(recovery).nPosition).toBe(5);
  });

  it.each([1.05, 0.95])("finds a width wrong by the factor %d", async (factor) => {
    const recovery = await recoverInjected(frame, widened(exact, factor), [flat]);
    expect(recovery.verdict.grade, told(recovery)).not.toBe("good");
    expect(grades(recovery, "flux")).toContain("doubtful");
    // With weights by read noise a Gaussian too wide by w reports 1 + w/2 of an isolated fibre's flux (overlap integrals of Gaussians);
    // fibres' own light and neighbours reduce that, but not its sign.
    const [faint] = recovery.cells.filter(({ from, place }) => from === 100 && place === "far");
    expect(Math.sign(faint.bias)).toBe(Math.sign(factor - 1));
  });

  it("gives the same numbers again, and others for another seed", async () => {
    const options = { cosmicRays: false };
    const first = await recoverInjected(frame, exact, [flat], options);
    expect(await recoverInjected(frame, exact, [flat], options)).toEqual(first);
    const other = await recoverInjected(frame, exact, [flat], { ...options, seed: 2 });
    expect(other.cells[0].bias).not.toBe(first.cells[0].bias);
  });

  it("leaves frame and flat as they were", async () => {
    const [before, flatBefore] = [frame.electrons.slice(), flat.electrons.slice()];
    await recoverInjected(frame, exact, [flat], { method: "boxcar" });
    expect(frame.electrons).toEqual(before);
    expect(flat.electrons).toEqual(flatBefore);
  });

  it("says which levels a faint flat leaves out", async () => {
    const faint = { ...flat, electrons: flat.electrons.map((electrons) => electrons / 20) };
    const recovery = await recoverInjected(frame, exact, [faint]);
    expect(Math.max(...recovery.cells.map(({ from }) => from))).toBe(100);
    expect(recovery.warnings[0]).toMatch(
      /^Nothing is injected at 1000 to 10000 e⁻ per column: the flat holds 15\d\d e⁻/,
    );
  });

  it("refuses fibres without a gap", async () => {
    const cut = 120;
    const crop = (one: Frame): Frame => ({ ...one, ny: cut, electrons: one.electrons.slice(0, cut * one.nx) });
    const inside = exact.state.map((_, k) => k >= 13 && k <= 19);
    const few: Tramlines = { ...exact, ny: cut, state: inside.map((lit) => (lit ? "lit" : "dead")) };
    // The block's ends, cut off below and above.
    const shifted = few.legendre.slice();
    const nCoef = few.degree + 1;
    for (let k = 0; k < few.nFibre; k++) shifted[k * nCoef] -= exact.legendre[13 * nCoef] - 4;
    const short = { ...few, legendre: shifted, ny: Math.ceil(shifted[19 * nCoef] + 6) };
    const window = { ...crop(frame), ny: short.ny };
    await expect(recoverInjected(window, short, [{ ...crop(flat), ny: short.ny }], { shift: false })).rejects.toThrow(
      /the recovery test needs one gap to tell fibres' light from scattered light/,
    );
  });
});

describe("on profiles that are skewed, with wings, over scattered light", () => {
  let frame: Frame;
  let flat: Frame;
  let traced: Frame;
  beforeAll(() => {
    frame = correctedFrame(exposureOf(BENCH, "sci_01"));
    traced = correctedFrame(exposureOf(BENCH, "fflat_01"));
    flat = correctedFrame(exposureOf(BENCH, "fflat_02"));
  });

  it("passes profiles measured on another flat, and fails them when they are 5 % too wide", async () => {
    const empirical = await empiricalLines(traced);
    const right = await recoverInjected(frame, empirical, [flat]);
    expect(right.verdict.grade, told(right)).toBe("good");
    expect(right.movedPixels).toBe(0);
    const wrong = await recoverInjected(frame, widened(empirical, 1.05), [flat], { refine: false });
    expect(wrong.verdict.grade, told(wrong)).not.toBe("good");
    expect(Math.abs(leak(wrong).meanShare)).toBeGreaterThan(4 * Math.abs(leak(right).meanShare));
  });

  it("finds Gaussians wanting", async () => {
    const recovery = await recoverInjected(frame, await gaussianLines(traced), [flat]);
    expect(recovery.verdict.grade, told(recovery)).toBe("bad");
    expect(recovery.verdict.sentence).toMatch(/^Do not trust the extraction of this frame: /);
    expect(grades(recovery, "leaked light")).toContain("doubtful");
    expect(leak(recovery).meanShare).toBeGreaterThan(0.002);
  });
});
