import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { type Points, SeriesFitter } from "../../src/tramlines/series.js";
import { streamOf } from "./flatScene.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const NX = 640;
const N_GROUP = 80;

/** y of fibre k: coefficients straight along the slit, and an own offset and tilt. */
const truth = (k: number, t: number, own = [0, 0]) =>
  30 + 5 * k + own[0] + (3 + 0.02 * k + own[1]) * t + (1.5 - 0.01 * k) * (1.5 * t * t - 0.5);

/** Points of nine fibres, `own` offsets by fibre, noise of 0.002 px. */
function points(own: Record<number, number[]>, isSeen: (k: number, g: number) => boolean): Points {
  const random = streamOf(8);
  const x = Float64Array.from({ length: N_GROUP }, (_, g) => 8 * g + 3.5);
  const fibre = (k: number, of: (g: number) => number) => x.map((_, g) => (isSeen(k, g) ? of(g) : 0));
  const all = Array.from({ length: 9 }, (_, k) => k);
  return {
    x,
    nx: NX,
    value: all.map((k) => fibre(k, (g) => truth(k, legendreArgument(x[g], NX), own[k]) + 0.002 * random.normal())),
    weight: all.map((k) => fibre(k, () => 2.5e5)),
    slit: Float64Array.from(all, (k) => 30 + 5 * k),
  };
}

describe("series through measured points", () => {
  it("fills a fibre without points from its neighbours", () => {
    const set = new SeriesFitter(
      kernels,
      points({}, (k) => k !== 3),
      8,
    ).fit(3);
    expect([set.nPoint[3], set.nPoint[4]]).toEqual([0, 80]);
    expect(set.rms[3]).toBeNaN();
    for (const t of [-1, 0.3, 1]) expect(Math.abs(legendreValue(set.coef[3], t) - truth(3, t))).toBeLessThan(0.003);
    expect(Math.abs(set.rms[4] - 0.002)).toBeLessThan(0.0006);
  });

  it("moves and tilts the neighbours' course onto a fibre seen over half of the width", () => {
    const own = { 5: [0.21, 0.13] };
    const set = new SeriesFitter(
      kernels,
      points(own, (k, g) => k !== 5 || g < 44),
      8,
    ).fit(4);
    for (const t of [-1, 0, 1])
      expect(Math.abs(legendreValue(set.coef[5], t) - truth(5, t, own[5]))).toBeLessThan(0.01);
    expect(set.nPoint[5]).toBe(44);
  });

  it("chooses the degree that the truth has, or one more: nine fibres tell their errors apart to some 3 %", () => {
    const degree = new SeriesFitter(
      kernels,
      points({}, () => true),
      8,
    ).chooseDegree(1, 8);
    expect([2, 3]).toContain(degree);
  });
});
