import { describe, expect, it } from "vitest";
import { NamingError } from "../../src/tramlines/errors.js";
import type { SlitLayout } from "../../src/tramlines/layout.js";
import { type Naming, nameFibres, numberFibres } from "../../src/tramlines/name.js";
import { anyLayout, anyRibbons, damages, n, type Ribbon } from "./damagedSlits.js";
import { slitPositions, streamOf } from "./flatScene.js";

const uneven: SlitLayout = { blocks: [9, 11, 10], pitch: 5.2, gap: [3.1, 4.7], dead: [4, 27], sky: [] };

/** Peaks of the fibres whose numbers `isLit` accepts, each a bit off its place. */
function ribbons(layout: SlitLayout, isLit: (fibre: number) => boolean, seed = 5, scale = 1): Ribbon[] {
  const random = streamOf(seed);
  return slitPositions(layout, scale).flatMap((y, i) => {
    const ribbon = { position: 31 + y + 0.1 * random.normal(), light: 9e4 * (1 + 0.1 * random.normal()), truth: i + 1 };
    return isLit(i + 1) ? [ribbon] : [];
  });
}

const listedLit = (layout: SlitLayout) => (fibre: number) => !layout.dead.includes(fibre);
const names = (naming: Naming) => [...naming.slitPosition];
const truth = (peaks: Ribbon[]) => peaks.map((peak) => peak.truth);

function messageOf(act: () => unknown): string {
  try {
    act();
  } catch (error) {
    if (error instanceof NamingError) return error.message;
    throw error;
  }
  return "named without complaint";
}

describe("naming by the slit layout", () => {
  it("names every ribbon, knows the blocks, and places the dead fibres between their neighbours", () => {
    const peaks = ribbons(uneven, listedLit(uneven), 3, 1.04);
    const naming = nameFibres(peaks, uneven);
    expect(names(naming)).toEqual(truth(peaks));
    expect([...naming.block].join("")).toBe("111111111222222222223333333333");
    const places = slitPositions(uneven, 1.04);
    expect(Math.abs(naming.centre[3] - 31 - places[3])).toBeLessThan(0.3);
    expect(Math.abs(naming.centre[26] - 31 - places[26])).toBeLessThan(0.3);
    expect(naming.warnings).toEqual([]);
    expect(naming.score - naming.runnerUpScore).toBeGreaterThan(30);
  });

  it("keeps the numbers when the first fibre is dark and not listed, and says so", () => {
    const peaks = ribbons(uneven, (fibre) => fibre !== 1 && listedLit(uneven)(fibre));
    const naming = nameFibres(peaks, uneven, "flat.fits");
    expect(names(naming)).toEqual(truth(peaks));
    expect(naming.warnings).toEqual([
      "flat.fits: no light in fibre 1, not listed as dead in the slit layout; they are taken as dead.",
    ]);
    expect(Math.abs(naming.centre[0] - 31)).toBeLessThan(0.5);
  });

  it("warns of light in a fibre listed as dead when all else is clear", () => {
    const peaks = ribbons(uneven, (fibre) => fibre !== 27);
    const naming = nameFibres(peaks, uneven, "flat.fits");
    expect(names(naming)).toEqual(truth(peaks));
    expect(naming.warnings).toEqual([
      "flat.fits: light in fibre 4, listed as dead in the slit layout; correct the list if the light is real.",
    ]);
  });

  it("refuses to choose between first and last fibre missing in one block without a mark", () => {
    const plain: SlitLayout = { blocks: [20], pitch: 5, gap: 0, dead: [], sky: [] };
    const message = messageOf(() =>
      nameFibres(
        ribbons(plain, (fibre) => fibre > 1),
        plain,
        "flat.fits",
      ),
    );
    expect(message).toMatch(
      /^flat\.fits: the 19 fibres from y = 3\d\.\d to 12\d\.\d can be read as (1 … 19|2 … 20) \(score -\d\.\d\)/,
    );
    expect(message).toContain("or as");
    expect(message).toContain("too close to decide: list all dead fibres in the spectrograph file");
  });

  it("tells them apart when two listed dead fibres mark the place", () => {
    const marked: SlitLayout = { blocks: [20], pitch: 5, gap: 0, dead: [7, 12], sky: [] };
    const peaks = ribbons(marked, (fibre) => fibre > 1 && fibre !== 7 && fibre !== 12);
    expect(names(nameFibres(peaks, marked))).toEqual(truth(peaks));
  });

  it("refuses to trust one entry of the list of dead fibres against a dark end of the slit", () => {
    // Fibre 6 is dead and 20 off the detector, but the list says 7: read one higher, all but fibre 1 would fit.
    const told: SlitLayout = { blocks: [20], pitch: 5, gap: 0, dead: [7], sky: [] };
    const peaks = ribbons(told, (fibre) => fibre !== 6 && fibre !== 20);
    expect(messageOf(() => nameFibres(peaks, told, "flat.fits"))).toMatch(
      /^flat\.fits: the 18 fibres .* can be read as 2 … 20 \(score -\d\.\d\) or as 1 … 19 .*too close to decide/,
    );
  });

  it("refuses a layout with a fibre too few, another pitch, or a dead list that counts from 0", () => {
    const peaks = ribbons(uneven, listedLit(uneven));
    expect(messageOf(() => nameFibres(peaks, { ...uneven, blocks: [8, 11, 10], dead: [4, 26] }, "f"))).toMatch(
      /(one pitch beside a fibre, where the slit layout has none|too close to decide|beside it is dark but not listed)/,
    );
    expect(messageOf(() => nameFibres(peaks, { ...uneven, pitch: 6.5 }, "f"))).toMatch(
      /^f: neighbouring ribbons of light stand 5\.\d\d px apart \(median of 27\), but the slit layout's pitch is 6\.5 px/,
    );
    expect(messageOf(() => nameFibres(peaks, { ...uneven, dead: [3, 26] }, "f"))).toBe(
      "f: fibre 3 is listed as dead but has light, and fibre 4 beside it is dark but not listed; correct the list of dead " +
        "fibres (positions count from 1, from low y upwards) or the counts of fibres in the blocks.",
    );
    expect(messageOf(() => nameFibres(peaks, { ...uneven, dead: [31] }, "f"))).toBe(
      "The slit layout lists position 31 as dead, but its positions run from 1 to 30.",
    );
    expect(messageOf(() => nameFibres(peaks, { ...uneven, gap: [3] }, "f"))).toContain(
      "one gap of 0 or more between each two",
    );
  });

  it("refuses a flat in which most fibres are dark", () => {
    const peaks = ribbons(uneven, (fibre) => fibre % 2 === 0);
    expect(messageOf(() => nameFibres(peaks, uneven, "f"))).toContain(
      "2 pitches apart in the median, so that most fibres are dark",
    );
  });
});

describe("naming many damaged slits", () => {
  for (const [name, damage] of Object.entries(damages)) {
    for (const moved of [false, true]) {
      it(`${name}${moved ? ", moved by one or two pitches" : ""}: right or refused, never wrong`, () => {
        let nRight = 0;
        const wrong: string[] = [];
        for (let seed = 1; seed <= 40; seed++) {
          const random = streamOf(1000 * seed + name.length + (moved ? 500 : 0));
          const layout = anyLayout(random.uniform);
          const all = Array.from({ length: n(layout) }, (_, i) => i + 1);
          const lit = new Set(all.filter((fibre) => !layout.dead.includes(fibre)));
          damage(layout, lit, random.uniform);
          const peaks = anyRibbons(layout, lit, random, moved);
          if (peaks.length < 4) continue;
          try {
            const given = names(nameFibres(peaks, layout));
            if (given.every((number, j) => number === peaks[j].truth)) nRight++;
            else wrong.push(`seed ${seed}: ${layout.blocks.join("+")} at ${layout.pitch.toFixed(2)} px`);
          } catch (error) {
            if (!(error instanceof NamingError)) throw error;
          }
        }
        expect(wrong).toEqual([]);
        // Refusing everything would be safe and useless. Where half of a slit of equal blocks is dark, most cases are truly open.
        expect(nRight).toBeGreaterThanOrEqual(name === "only one block lit" ? 2 : name.startsWith("half") ? 12 : 28);
      });
    }
  }
});

describe("numbering without a layout", () => {
  it("numbers what is found, parts blocks at holes, and says that whole pitches might be dead fibres", () => {
    const peaks = ribbons(uneven, listedLit(uneven));
    const naming = numberFibres(peaks, "flat.fits");
    expect(names(naming)).toEqual(Array.from({ length: 28 }, (_, i) => i + 1));
    // Holes at dead fibre 4, both gaps (0.60 and 0.90 pitches wide) and dead fibre 27.
    expect([...naming.block].join("")).toBe("1112222233333333333444444555");
    expect(naming.assumptions[0]).toBe(
      "flat.fits: no slit layout was given, so the 28 fibres found are numbered from low y, in 5 blocks parted by holes wider " +
        "than a pitch; a dead or unlit fibre has no number.",
    );
    expect(naming.assumptions[1]).toMatch(
      /^flat\.fits: the holes after fibres 3, .*25 are whole pitches wide and could be dead/,
    );
  });
});
