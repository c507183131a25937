/** Smooth stand-ins for bias and dark stacks: taken where pixels show nothing of their own, refused where they do. */
import { describe, expect, it } from "vitest";
import type { Region } from "../../src/detector/assemble.js";
import { combineFrames, type StackFrame } from "../../src/detector/combine.js";
import { halvesOf, quietImage } from "../../src/detector/quiet.js";
import { normalDeviate } from "../scene.js";
import { momentsOf, seeded } from "./rawFrames.js";

const NX = 190;
const NY = 150;
const READ = 3.7;
const REGION = { x0: 0, x1: NX, y0: 0, y1: NY, readVariance: READ ** 2 } as Region;

/** `n` frames of `level` plus noise, and what becomes of their stack. */
function stackOf(n: number, seed: number, level: (x: number, y: number) => number) {
  const next = seeded(seed);
  const frames: StackFrame[] = Array.from({ length: n }, () => ({
    electrons: Float32Array.from(
      { length: NX * NY },
      (_, at) => level(at % NX, Math.floor(at / NX)) + READ * normalDeviate(next),
    ),
    mask: new Uint8Array(NX * NY),
    regions: [REGION],
    scale: 1,
  }));
  const stack = combineFrames(frames, NX, NY, false);
  const shares = { regions: [REGION], shared: [0], halves: halvesOf(frames) };
  const quiet = quietImage({ nx: NX, ny: NY, ...stack, ...shares });
  const errors = stack.mean.map((value, at) => value - level(at % NX, Math.floor(at / NX)));
  return { ...quiet, errors, variance: stack.variance, nOwn: quiet.own.reduce((sum, own) => sum + own, 0) };
}

const gentle = (x: number, y: number) => 2 + 1.5 * (x / NX) ** 2 - 0.8 * (y / NY);
const white = (x: number, y: number) => {
  const wave = Math.sin(12.9898 * x + 78.233 * y) * 43758.5453;
  return Math.sqrt(12) * (wave - Math.floor(wave) - 0.5);
};

describe("a stack of frames whose pixels are alike", () => {
  it.each([1, 2, 5])("of %i becomes smooth, with errors as small as its variance says", (n) => {
    const { isQuiet, errors, variance, patternBelow } = stackOf(n, 10 + n, gentle);
    expect(isQuiet).toEqual([true]);
    const { sigma } = momentsOf(errors);
    // Some 190 + 150 + 42 terms of 28 500 pixels' noise: √(382/28 500) = 0.116 of the stack's σ.
    expect(sigma).toBeLessThan((0.14 * READ) / Math.sqrt(n));
    const predicted = Math.sqrt(variance.reduce((sum, v) => sum + v, 0) / variance.length);
    expect(sigma / predicted).toBeGreaterThan(0.4);
    expect(sigma / predicted).toBeLessThan(1.15);
    expect(patternBelow[0]).toBeLessThan(1);
  });

  it("follows rows and columns that differ", () => {
    const { isQuiet, errors } = stackOf(4, 21, (x, y) => gentle(x, y) + 2 * white(x, 0) + 1.5 * white(3, y));
    expect(isQuiet).toEqual([true]);
    expect(momentsOf(errors).sigma).toBeLessThan(0.14 * (READ / 2));
  });

  it("leaves hot and dead pixels their own value", () => {
    const hot = (x: number, y: number) => (x * 7 + y * 13) % 211 === 0;
    const { errors, own } = stackOf(4, 22, (x, y) => gentle(x, y) + (hot(x, y) ? 40 : 0));
    const ofHot = errors.filter((_, at) => hot(at % NX, Math.floor(at / NX)));
    expect(own.filter((_, at) => hot(at % NX, Math.floor(at / NX))).every((value) => value === 1)).toBe(true);
    expect(Math.abs(momentsOf(ofHot).mean)).toBeLessThan(1);
  });
});

describe("a stack whose pixels differ", () => {
  it("from pixel to pixel is kept, though the pattern is a third of its noise", () => {
    const { isQuiet, nOwn } = stackOf(4, 31, (x, y) => gentle(x, y) + 0.6 * white(x, y));
    expect([isQuiet, nOwn]).toEqual([[false], NX * NY]);
  });

  it("in blotches of 26 pixels is kept, though no pixel shows it: 0.25 e⁻ rms under 1.85 e⁻ of noise", () => {
    const blotch = (x: number, y: number) => 0.5 * Math.sin(x / 9) * Math.sin(y / 8.3);
    const { isQuiet, nOwn } = stackOf(4, 32, (x, y) => gentle(x, y) + blotch(x, y));
    expect([isQuiet, nOwn]).toEqual([[false], NX * NY]);
  });

  it("by less than is worth the stack's noise is left out, and its variance counted", () => {
    const { isQuiet, errors, variance } = stackOf(4, 33, (x, y) => gentle(x, y) + 0.3 * white(x, y));
    expect(isQuiet).toEqual([true]);
    const { sigma } = momentsOf(errors);
    const predicted = Math.sqrt(variance.reduce((sum, v) => sum + v, 0) / variance.length);
    expect(sigma / predicted).toBeGreaterThan(0.75);
    expect(sigma / predicted).toBeLessThan(1.3);
  });
});
