import { beforeAll, describe, expect, it } from "vitest";
import { type Frame, MaskBit } from "../../src/detector/frame.js";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import { combineFlats, groupColumns } from "../../src/tramlines/flat.js";
import { drawFlat, type FlatScene } from "./flatScene.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const layout = { blocks: [3], pitch: 6, gap: 0, dead: [], sky: [] };
const scene: FlatScene = { seed: 2, nx: 24, layout, fwhm: 2.5, sag: 0, tilt: 0, light: 9000 };

/** The scene's frame with every pixel at `level`, the given pixels changed. */
function level(value: number, changes: Record<number, number> = {}): Frame {
  const { frame } = drawFlat(scene);
  frame.electrons.fill(value);
  for (const [at, electrons] of Object.entries(changes)) frame.electrons[Number(at)] = electrons;
  return frame;
}

describe("combining flats", () => {
  it("takes the lower value where two differ by over 5 σ, and the mean elsewhere", () => {
    // σ of a difference at 900 e⁻: √(2·(900 + 16) + (0.02·900)²) = 46.4 e⁻; 5 σ = 232 e⁻.
    const flat = combineFlats([level(900, { 50: 1500, 77: 1100 }), level(900, { 60: 5000 })]);
    expect([flat.electrons[50], flat.electrons[60], flat.electrons[77], flat.electrons[78]]).toEqual([
      900, 900, 1000, 900,
    ]);
    expect([flat.nUsed[50], flat.nUsed[60], flat.nUsed[77]]).toEqual([1, 1, 2]);
  });

  it("brings flats to the first one's level, and keeps what one of them lacks", () => {
    const dim = level(450);
    dim.mask[33] = 1;
    dim.electrons[34] = Number.NaN;
    const bright = level(900, { 33: 880, 34: 860 });
    const flat = combineFlats([bright, dim]);
    expect([flat.electrons[32], flat.electrons[33], flat.electrons[34]]).toEqual([900, 880, 860]);
    expect([flat.nUsed[32], flat.nUsed[33], flat.nUsed[34]]).toEqual([2, 1, 1]);
  });

  it("has no value, and says why, where no frame has one", () => {
    const [one, other] = [level(900), level(900)];
    one.mask[40] = 2;
    other.mask[40] = 6;
    const flat = combineFlats([one, other]);
    expect(flat.electrons[40]).toBeNaN();
    expect([flat.mask[40], flat.nUsed[40], flat.mask[41]]).toEqual([2, 0, 0]);
  });

  it("marks what one frame alone does not have, and leaves the frame as it was", () => {
    const one = level(900);
    one.mask[40] = 2;
    one.electrons[41] = Number.NaN;
    const flat = combineFlats([one]);
    expect([...flat.nUsed.subarray(39, 43)]).toEqual([1, 0, 0, 1]);
    expect([...flat.mask.subarray(39, 43)]).toEqual([0, 2, MaskBit.missing, 0]);
    expect(one.mask[41]).toBe(0);
  });

  it("averages columns without their cosmic rays, with the variance of what is left", () => {
    const { nx } = scene;
    const frame = level(900, { [5 * nx + 9]: 4000 });
    frame.mask[6 * nx + 10] = 1;
    const [group] = groupColumns(kernels, combineFlats([frame]), [{ from: 8, to: 16 }]);
    expect([group.mean[4], group.mean[5], group.mean[6]]).toEqual([900, 900, 900]);
    expect([group.count[4], group.count[5], group.count[6]]).toEqual([8, 7, 7]);
    // Read noise 4 e⁻: 16 e⁻² a pixel; photons 1 e⁻² per e⁻.
    expect([group.fixedVariance[4], group.fixedVariance[5]]).toEqual([16 / 8, 16 / 7]);
    expect([group.variancePerElectron[4], group.variancePerElectron[6]]).toEqual([1 / 8, 1 / 7]);
    expect(group.x).toBe(11.5);
  });
});
