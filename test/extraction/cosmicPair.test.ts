/** Cosmic rays by a second frame: hits that mimic a profile, and what must not be taken for one. */
import { beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { findPairHits, type PairHits } from "../../src/extraction/cosmicPair.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { Flag } from "../../src/extraction/spectra.js";
import { MaskBit } from "../../src/reference/bits.js";
import type { SimulatedExposure } from "../../src/simulate/exposure.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";
import { bench, nFibre, readNoise } from "./twoBlocks.js";

const nx = 1280;
const science = "faintest = 200\nbrightest = 2e4\nsky_level = 30\nsky_line = 9000\nemission_share = 1";
const more = "[cosmic_rays]\nrate = 110\nelectrons = 3000";
/** Hits that look like light of the fibre: e⁻ spread as its profile, in one column. */
const mimics = Array.from({ length: 48 }, (_, i) => ({ k: [0, 2, 4, 7, 9, 12][i % 6], x: 41 + 23 * i, electrons: 0 }));
let first: SimulatedExposure;
let lines: Tramlines;
let frame: Frame;
let pair: Frame;
let found: PairHits;

/** The same scene at another time: a thinner sky, a little shift, its own cosmic rays and noise. */
function exposures() {
  const change = { nx, science, more };
  return [
    bench("science", change),
    bench("science", { ...change, name: "two", exposure: "brightness = 0.8\nshift = 0.06" }),
  ];
}

function plantMimics(): void {
  const { truth } = first;
  for (const hit of mimics) {
    const at = hit.k * nx + hit.x;
    hit.electrons = 30 * Math.sqrt(truth.flux[at] + 12 * readNoise ** 2);
    const y0 = Math.round(truth.trace[at]) - 4;
    truth.truthProfile(hit.k, hit.x, y0, 9).forEach((weight, i) => {
      frame.electrons[(y0 + i) * nx + hit.x] += weight * hit.electrons;
    });
  }
}

beforeAll(async () => {
  const both = exposures();
  first = both[0];
  lines = tramlinesFromTruth(first);
  lines.profile.relativeError = 0.01;
  frame = frameFromTruth(first, readNoise);
  pair = frameFromTruth(both[1], readNoise);
  plantMimics();
  found = await findPairHits(frame, pair, lines);
}, 120_000);

/** Of spectrum points hit by over 20 σ, the share that is neither flagged nor within 5 σ of the truth. */
function strongMissed(spectra: Awaited<ReturnType<typeof extractFrame>>["spectra"]) {
  const { truth } = first;
  let [strong, missed] = [0, 0];
  const charge = hitCharge();
  for (let i = 0; i < nFibre * nx; i++) {
    if (!truth.lit[Math.floor(i / nx)]) continue;
    const sigma = Math.sqrt(truth.flux[i] + 12 * readNoise ** 2);
    if (charge[i] < 20 * sigma) continue;
    strong++;
    const flagged = (spectra.flags[i] & (Flag.cosmicRay | Flag.weightLost)) !== 0;
    if (!flagged && spectra.flux[i] - truth.flux[i] > 5 * sigma) missed++;
  }
  return { strong, missed };
}

/** e⁻ of cosmic rays within 2.5 px of each fibre: [nFibre × nx]. */
function hitCharge(): Float64Array {
  const { truth } = first;
  const charge = new Float64Array(nFibre * nx);
  for (let i = 0; i < charge.length; i++) {
    for (let y = Math.ceil(truth.trace[i] - 2); y <= truth.trace[i] + 2; y++) {
      charge[i] += truth.cosmicRays[y * nx + (i % nx)];
    }
  }
  for (const { k, x, electrons } of mimics) charge[k * nx + x] += electrons;
  return charge;
}

describe("a second frame of the field", () => {
  it("finds hits that mimic a profile, which one frame alone cannot tell", async () => {
    const alone = await extractFrame(frame, lines);
    const together = await extractFrame(frame, lines, { knownHits: found.hits });
    const [before, after] = [strongMissed(alone.spectra), strongMissed(together.spectra)];
    expect(before.strong).toBeGreaterThan(80);
    expect(before.missed).toBeGreaterThanOrEqual(40); // most of the 48 that were planted
    expect(after.missed / after.strong).toBeLessThanOrEqual(0.02);
    for (const { k, x } of mimics) {
      const bits = together.spectra.flags[k * nx + x];
      expect(bits & (Flag.cosmicRay | Flag.weightLost), `fibre ${k + 1}, column ${x}`).not.toBe(0);
    }
  });

  it("measures by how much the light changed", () => {
    expect(Math.abs(found.scale - 1 / 0.8)).toBeLessThan(0.01);
    expect(found.warnings).toEqual([]);
  });

  it("takes no light of the field for a hit: lines, another brightness, a shift", () => {
    const { truth } = first;
    const touched = new Uint8Array(nx * truth.ny);
    truth.cosmicRays.forEach((electrons, i) => {
      if (electrons > 0) touched[i] = 1;
    });
    const mimicked = new Set(mimics.map(({ x }) => x));
    let [clean, wrong] = [0, 0];
    for (let i = 0; i < touched.length; i++) {
      const [x, y] = [i % nx, Math.floor(i / nx)];
      const beside = [-1, 0, 1].some((dx) => [-1, 0, 1].some((dy) => touched[(y + dy) * nx + x + dx] === 1));
      const planted = [x - 1, x, x + 1].some((column) => mimicked.has(column));
      if (beside || planted) continue;
      clean++;
      if (found.hits[i] !== 0) wrong++;
    }
    // Beyond 5 σ lie 3e-7 of normal deviates; Poisson counts of some hundred e⁻ have a longer tail.
    expect(wrong / clean).toBeLessThan(3e-5);
  });

  it("says so when it is of another field, and tells of no hit", async () => {
    const other = frameFromTruth(bench("science", { nx, science, seed: 77, name: "other" }), readNoise);
    const none = await findPairHits(frame, other, lines);
    expect(none.nPixel).toBe(0);
    expect(none.hits.every((bits) => bits === 0)).toBe(true);
    expect(none.warnings).toHaveLength(1);
    expect(none.warnings[0]).toMatch(/^other: its spectra are not those of one at any scale/);
  });
});

describe("known hits", () => {
  it("are left out and counted, and must have the frame's size", async () => {
    const hits = new Uint8Array(frame.mask.length);
    const y = Math.round(first.truth.trace[7 * nx + 300]);
    hits[y * nx + 300] = 1;
    const given = frame.mask.slice();
    const { rejected, spectra, nRejected } = await extractFrame(frame, lines, { knownHits: hits, cosmicRays: false });
    expect(rejected[y * nx + 300]).toBe(MaskBit.cosmic);
    expect(nRejected).toBe(1);
    expect(spectra.flags[7 * nx + 300] & Flag.cosmicRay).toBe(Flag.cosmicRay);
    expect(spectra.flags[7 * nx + 301]).toBe(0);
    expect(frame.mask).toEqual(given);
    await expect(extractFrame(frame, lines, { knownHits: hits.subarray(1) })).rejects.toThrow(
      `one: ${hits.length - 1} pixels are marked as hit or not, but the frame has ${hits.length}`,
    );
  });
});
