/** Fibre flats one by one: the true light whatever their number, and none that lie elsewhere or are no flats. */
import { describe, expect, it } from "vitest";
import { clippedScatter } from "../../src/detector/clip.js";
import { DetectorError } from "../../src/detector/detectorError.js";
import type { Frame } from "../../src/detector/frame.js";
import { openStream } from "../../src/random/streams.js";
import { combineFlats, pixelVariance } from "../../src/tramlines/flat.js";
import { flatsApart, placeAgainst } from "../../src/tramlines/flatPlace.js";
import { stackFlats } from "../../src/tramlines/flatStack.js";
import { normalDeviate } from "../scene.js";
import { drawFlat, type FlatScene } from "./flatScene.js";

const layout = { blocks: [6, 7], pitch: 5.3, gap: 5, dead: [4], sky: [] };
const scene: FlatScene = { seed: 7, nx: 160, layout, fwhm: 2.4, sag: 2, tilt: 1.3, light: 4e9, readNoise: 1e-3 };

/** Light without noise to speak of, e⁻ a pixel. */
function lightOf(moved: number, level: number): Float64Array {
  return Float64Array.from(drawFlat({ ...scene, moved }).frame.electrons, (value) => (value * level) / 1e6);
}

/** A flat with photons and read noise, hit at one pixel in two hundred. */
function flat(seed: number, { moved = 0, level = 1, hits = 0.005, tint = 0 } = {}): Frame {
  const { frame } = drawFlat({ ...scene, light: 4000 });
  const next = openStream(seed, "flats").uniform;
  frame.name = `f${seed}.fits`;
  lightOf(moved, level).forEach((mean, at) => {
    const light = mean * (1 + (tint * (at % frame.nx)) / frame.nx);
    const hit = next() < hits ? 300 + 5000 * next() : 0;
    frame.electrons[at] = light + Math.sqrt(light + 9) * normalDeviate(next) + hit;
  });
  frame.noise.fixedVariance.fill(9);
  return frame;
}

function listed(frames: Frame[]) {
  const times = frames.map(() => 0);
  const read = async (index: number) => {
    times[index]++;
    return frames[index];
  };
  return { length: frames.length, read, times };
}

describe("fibre flats read one by one", () => {
  it("are combined as held ones up to four, each read once", async () => {
    const frames = [1, 2, 3, 4].map((seed) => flat(seed, { level: 1 + 0.2 * seed }));
    const list = listed(frames);
    const { flat: stacked, used, warnings } = await stackFlats(list);
    const together = combineFlats(frames);
    expect(stacked).toEqual(together);
    expect([used, warnings, list.times]).toEqual([[0, 1, 2, 3], [], [1, 1, 1, 1]]);
  });

  it("of twelve: the true light within its errors, hits left out", async () => {
    const frames = Array.from({ length: 12 }, (_, i) => flat(20 + i, { level: i === 0 ? 1 : 0.5 + 0.15 * i }));
    const list = listed(frames);
    const { flat: stacked } = await stackFlats(list);
    expect(Math.max(...list.times)).toBe(2);
    expect([stacked.nFrame, stacked.name.split(", ").length]).toEqual([12, 12]);
    const truth = lightOf(0, 1);
    // Frames at the first one's level: each has the photons of its own level, Σ light/level over n².
    const share = frames.reduce((sum, _, i) => sum + 1 / (i === 0 ? 1 : 0.5 + 0.15 * i), 0) / 12 ** 2;
    const pulls: number[] = [];
    let nLost = 0;
    truth.forEach((light, at) => {
      if (light > 300) pulls.push((stacked.electrons[at] - light) / Math.sqrt(light * share));
      nLost += 12 - stacked.nUsed[at];
    });
    const { mean, sigma, n } = clippedScatter(pulls);
    expect(n / pulls.length).toBeGreaterThan(0.999);
    // The common level hangs on the first frame's own photons.
    expect(Math.abs(mean)).toBeLessThan(0.2);
    expect(Math.abs(sigma - 1)).toBeLessThan(0.05);
    expect(nLost / (12 * truth.length)).toBeGreaterThan(0.0045);
    expect(nLost / (12 * truth.length)).toBeLessThan(0.0056);
    expect(pixelVariance(stacked.frame, 0, 0)).toBe(9);
  });

  it("leave out what lies elsewhere, has another light, or is no flat", async () => {
    const frames = Array.from({ length: 7 }, (_, i) => flat(40 + i, { moved: 0.01 * (i % 3) }));
    frames[0] = flat(50, { moved: 0.31 });
    frames[3] = flat(51, { tint: 0.9 });
    const list = listed(frames);
    const read = async (index: number) => {
      if (index === 5)
        throw new DetectorError("off.fits was given as a fibre flat, but there is no light; check the list of frames.");
      return list.read(index);
    };
    const { used, warnings } = await stackFlats({ length: 7, read });
    expect(used).toEqual([1, 2, 4, 6]);
    expect(warnings).toHaveLength(3);
    expect(warnings[0]).toMatch(
      /^f50\.fits has its fibres 0\.(29|3\d) px from those of the flats that are used, and a mean of both would have broader profiles than either; it is left out, and 4 of the 7 fibre flats remain\.$/,
    );
    expect(warnings[1]).toMatch(
      /^f51\.fits spreads its light over the detector otherwise than the other flats, by over \d+ % in places; it is left out/,
    );
    expect(warnings[2]).toBe(
      "off.fits was given as a fibre flat, but there is no light; it is left out, and 4 of the 7 fibre flats remain.",
    );
  });

  it("two that lie apart are both kept, with a word; half that are none are refused", async () => {
    const { used, warnings } = await stackFlats(listed([flat(60), flat(61, { moved: 0.4 })]));
    expect(used).toEqual([0, 1]);
    expect(warnings).toEqual([
      expect.stringMatching(
        /^f61\.fits: its fibres lie 0\.[34]\d px from those of f60\.fits, so that the mean of both has broader profiles/,
      ),
    ]);
    const none = async () => {
      throw new DetectorError("off.fits was given as a fibre flat, but there is no light; check the list of frames.");
    };
    await expect(stackFlats({ length: 2, read: none })).rejects.toThrow("off.fits was given as a fibre flat");
  });
});

describe("the place of a flat", () => {
  it.each([0.01, -0.05, 0.12])("moved by %f px is measured to a tenth of it", (moved) => {
    const { shift } = placeAgainst(flat(70), flat(71, { moved, level: 1.7 }));
    expect(Math.abs(shift - moved)).toBeLessThan(0.1 * Math.abs(moved) + 0.006);
  });

  it("with half of them lit otherwise nothing can be told", () => {
    const lights = [
      Float64Array.of(1, 1, 1),
      Float64Array.of(1, 1, 1),
      Float64Array.of(1, 1, 1.9),
      Float64Array.of(1, 1, 1.9),
    ];
    expect(() => flatsApart(lights.map((spread) => ({ shift: 0, spread })))).toThrow(
      /^\d of the 4 fibre flats spread their light over the detector otherwise than the rest, too many to tell which are right; give flats of one lamp\.$/,
    );
  });

  it("of two equal groups the first stays", () => {
    const spread = Float64Array.of(1, 1);
    const reasons = flatsApart([0, 0.3, 0.01, 0.31].map((shift) => ({ shift, spread })));
    expect(reasons.map((reason) => reason === undefined)).toEqual([true, false, true, false]);
  });
});
