/** Steps at the seams between amplifiers, on drawn flats of known gains. */
import { describe, expect, it } from "vitest";
import { makeCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { flatWarnings } from "../../src/detector/flatWarnings.js";
import { lookAt } from "../../src/detector/look.js";
import type { RawImage } from "../../src/detector/raw.js";
import { amplifierSeams, isStep } from "../../src/detector/seams.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { type Cards, rawFrame, seeded } from "./rawFrames.js";

const GAINS = [1.2, 1.9, 1.5, 0.9];

/** Four quadrants of 110 × 130 and 90 × 130 pixels below, 120 rows above; 12 columns of overscan on each side. */
const PLACES: [string, string, string][] = [
  ["[13:122,1:130]", "[1:12,1:130]", "[1:110,1:130]"],
  ["[123:212,1:130]", "[213:224,1:130]", "[111:200,1:130]"],
  ["[13:122,131:250]", "[1:12,131:250]", "[1:110,131:250]"],
  ["[123:212,131:250]", "[213:224,131:250]", "[111:200,131:250]"],
];

/** `given`: the header's gains over the true ones. */
function cardsOf(kind: string, given: number[]): Cards {
  const cards: Cards = { NAMPS: 4, SATURATE: 65535, DISPAXIS: 1, IMAGETYP: kind, EXPTIME: 10 };
  PLACES.forEach(([data, overscan, place], k) => {
    cards[`GAIN${k + 1}`] = GAINS[k] * given[k];
    cards[`RDNOISE${k + 1}`] = 3.2;
    cards[`DATASEC${k + 1}`] = data;
    cards[`BIASSEC${k + 1}`] = overscan;
    cards[`CCDSEC${k + 1}`] = place;
  });
  return cards;
}

/** Light (e⁻) with a lamp's slope, response of 1 % rms without rows or columns, another for each seed; cosmic rays. */
function exposed(name: string, kind: string, seed: number, given = [1, 1, 1, 1]): RawImage {
  const next = seeded(seed);
  return rawFrame(name, 224, 250, cardsOf(kind, given), (fx, fy) => {
    const amplifier = (fx < 122 ? 0 : 1) + (fy < 130 ? 0 : 2);
    const x = fx - 12;
    const lit = x >= 0 && x < 200;
    const ribbons = kind === "fibre flat" ? 1.05 + Math.sin((fy + 0.02 * x) * 1.28) : 1;
    const wave = Math.sin(12.9898 * x + 78.233 * fy + seed) * 43758.5453;
    const response = 1 + 0.035 * (wave - Math.floor(wave) - 0.5);
    const lamp = 9000 * (1 - 0.3 * ((x - 70) / 200) ** 2) * (1 + 0.1 * (fy / 250));
    const counts = (lit ? poissonDeviate(lamp * ribbons * response, next) : 0) + 3.2 * normalDeviate(next);
    const cosmic = lit && next() < 0.0003 ? 6000 : 0;
    return Math.round(1000 + (counts + cosmic) / GAINS[amplifier]);
  });
}

const seamsOf = (raw: RawImage, evenLight: boolean) => {
  const frame = correctFrame(raw, { inputs: [], assumptions: [], warnings: [] });
  const region = (x0: number, x1: number, y0: number, y1: number, number: number) => ({
    ...{ x0, x1, y0, y1 },
    amplifier: { number } as never,
  });
  const regions = [
    region(0, 110, 0, 130, 1),
    region(110, 200, 0, 130, 2),
    region(0, 110, 130, 250, 3),
    region(110, 200, 130, 250, 4),
  ];
  return amplifierSeams({ ...frame, regions }, evenLight);
};

describe("steps at the seams between amplifiers", () => {
  it("none where the gains are right: in a detector flat across all four seams, in a fibre flat across columns", () => {
    const even = seamsOf(exposed("d.fits", "detector flat", 1), true);
    expect(even.map(({ before, after, axis, at }) => `${before} ${after} ${axis} ${at}`)).toEqual([
      ...["1 2 x 110", "1 3 y 130", "2 4 y 130", "3 4 x 110"],
    ]);
    const fibres = seamsOf(exposed("f.fits", "fibre flat", 2), false);
    expect(fibres.map(({ axis }) => axis)).toEqual(["x", "x"]);
    for (const seam of [...even, ...fibres]) {
      expect(isStep(seam)).toBe(false);
      expect(Math.abs(seam.step.value)).toBeLessThan(4.5 * seam.step.error);
      expect(seam.step.error).toBeLessThan(0.004);
    }
  });

  it("a gain given 3 % too large is seen at both its seams, to within the error", () => {
    const seams = seamsOf(exposed("d.fits", "detector flat", 3, [1, 1.03, 1, 1]), true);
    const expected: Record<string, number> = { "1 2": 0.03, "1 3": 0, "2 4": 1 / 1.03 - 1, "3 4": 0 };
    for (const seam of seams) {
      const step = expected[`${seam.before} ${seam.after}`];
      expect(Math.abs(seam.step.value - step)).toBeLessThan(4.5 * seam.step.error);
      expect(isStep(seam)).toBe(step !== 0);
    }
  });

  it("errors are what repeated flats scatter by", () => {
    const pulls: number[] = [];
    for (let run = 0; run < 25; run++) {
      for (const { step } of seamsOf(exposed("d.fits", "detector flat", 100 + run), true))
        pulls.push(step.value / step.error);
    }
    const rms = Math.sqrt(pulls.reduce((sum, pull) => sum + pull * pull, 0) / pulls.length);
    // 100 pulls of errors from 7 to 10 strips: Student's t with 6 to 9 degrees of freedom has a std of 1.13 to 1.22.
    expect(pulls).toHaveLength(100);
    expect(rms).toBeGreaterThan(0.7);
    expect(rms).toBeLessThan(1.6);
  });

  it("is told by a look, by pixel flats, and by fibre flats unless pixel flats did", async () => {
    const given = [1, 1.03, 1, 1.03];
    const sentence =
      /^\w+\.fits: amplifier 2 shows (2\.\d\d|3\.\d\d) ± 0\.\d\d % more light than amplifier 1 at the seam between them \(columns 110 and 111 of the turned frame, from 1\), so the ratio of their gains is off by that and every spectrum steps there; correct one gain in the spectrograph file\.$/;
    const fibreFlat = exposed("f.fits", "fibre flat", 5, given);
    const look = await lookAt(fibreFlat);
    expect(look.warnings.filter((text) => text.includes("at the seam"))).toHaveLength(2);
    expect(look.warnings[0]).toMatch(sentence);
    expect(look.seams).toHaveLength(2);
    expect((await lookAt(exposed("s.fits", "object", 5, given))).seams).toEqual([]);
    const pixelFlat = [exposed("p.fits", "detector flat", 6, given)];
    const calibrations = await makeCalibrations({ pixelFlat });
    expect(calibrations.warnings.filter((text) => text.includes("at the seam"))[0]).toMatch(sentence);
    const bare = { inputs: [], assumptions: [], warnings: [] };
    expect(flatWarnings([fibreFlat], [correctFrame(fibreFlat, bare)], bare)[0]).toMatch(sentence);
    expect(flatWarnings([fibreFlat], [correctFrame(fibreFlat, calibrations)], calibrations)).toEqual([]);
  });
});
