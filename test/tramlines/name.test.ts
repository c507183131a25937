import { describe, expect, it } from "vitest";
import { NamingError } from "../../src/tramlines/errors.js";
import type { SlitLayout } from "../../src/tramlines/layout.js";
import { type Naming, nameFibres, numberFibres } from "../../src/tramlines/name.js";
import { slitPositions, streamOf } from "./flatScene.js";

interface Ribbon {
  position: number;
  light: number;
  /** The fibre that it truly is, from 1; 0 for a ghost. */
  truth: number;
}

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

  it("tells them apart when a listed dead fibre marks the place", () => {
    const marked: SlitLayout = { blocks: [20], pitch: 5, gap: 0, dead: [7], sky: [] };
    const peaks = ribbons(marked, (fibre) => fibre > 1 && fibre !== 7);
    expect(names(nameFibres(peaks, marked))).toEqual(truth(peaks));
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

/** A slit that has suffered: which of its fibres are lit, and where they stand. */
type Damage = (layout: SlitLayout, lit: Set<number>, uniform: () => number) => void;

const n = (layout: SlitLayout) => layout.blocks.reduce((sum, count) => sum + count, 0);
function blockRange(layout: SlitLayout, block: number): [number, number] {
  const from = layout.blocks.slice(0, block).reduce((sum, count) => sum + count, 1);
  return [from, from + layout.blocks[block] - 1];
}
const pick = (uniform: () => number, count: number) => Math.floor(uniform() * count);

const damages: Record<string, Damage> = {
  none: () => {},
  "first fibre missing": (_, lit) => lit.delete(1),
  "last fibre missing": (layout, lit) => lit.delete(n(layout)),
  "fibres missing at either end": (layout, lit, uniform) => {
    for (let i = 0; i <= pick(uniform, 4); i++) lit.delete(uniform() < 0.5 ? 1 + i : n(layout) - i);
  },
  "a fifth of a block unlit": (layout, lit, uniform) => {
    const [from, to] = blockRange(layout, pick(uniform, layout.blocks.length));
    const count = Math.max(1, Math.round(0.2 * (to - from + 1)));
    const first = from + pick(uniform, to - from + 2 - count);
    for (let i = 0; i < count; i++) lit.delete(first + i);
  },
  "half of the slit unlit": (layout, lit, uniform) => {
    const upper = uniform() < 0.5;
    for (let fibre = 1; fibre <= n(layout); fibre++) if (fibre > n(layout) / 2 === upper) lit.delete(fibre);
  },
  "only one block lit": (layout, lit, uniform) => {
    const [from, to] = blockRange(layout, pick(uniform, layout.blocks.length));
    for (let fibre = 1; fibre <= n(layout); fibre++) if (fibre < from || fibre > to) lit.delete(fibre);
  },
  "a block in the middle unlit": (layout, lit, uniform) => {
    if (layout.blocks.length < 3) return;
    const [from, to] = blockRange(layout, 1 + pick(uniform, layout.blocks.length - 2));
    for (let fibre = from; fibre <= to; fibre++) lit.delete(fibre);
  },
  "dead fibres that are not listed": (layout, lit, uniform) => {
    for (let fibre = 1; fibre <= n(layout); fibre++) if (uniform() < 0.03) lit.delete(fibre);
  },
  "light in a listed dead fibre": (layout, lit) => {
    if (layout.dead.length > 0) lit.add(layout.dead[0]);
  },
};

/** Any layout: 1 to 8 blocks of 5 to 30 fibres, pitch 4 to 10 px, gaps of 0.3 to 1.5 pitches, some listed dead. */
function anyLayout(uniform: () => number): SlitLayout {
  const count = 5 + pick(uniform, 26);
  const blocks = Array.from({ length: 1 + pick(uniform, 8) }, () =>
    uniform() < 0.7 ? count : Math.max(3, count + pick(uniform, 5) - 2),
  );
  const pitch = 4 + 6 * uniform();
  const layout = { blocks, pitch, gap: pitch * (0.3 + 1.2 * uniform()), dead: [] as number[], sky: [] };
  const share = uniform() < 0.6 ? 0.02 : 0;
  for (let fibre = 1; fibre <= n(layout); fibre++) if (uniform() < share) layout.dead.push(fibre);
  return layout;
}

/** Its ribbons: scale within 5 %, gaps within 15 %, distortion of 2 %, positions off by 2 % of the pitch; some moved off
 * the detector by up to two pitches. */
function anyRibbons(
  layout: SlitLayout,
  lit: Set<number>,
  random: ReturnType<typeof streamOf>,
  moved: boolean,
): Ribbon[] {
  const { uniform, normal } = random;
  const scale = 1 + 0.05 * (2 * uniform() - 1);
  const bend = 0.02 * (2 * uniform() - 1);
  const truly = { ...layout, gap: (layout.gap as number) * (1 + 0.15 * (2 * uniform() - 1)) };
  const places = slitPositions(truly, scale);
  const span = Math.max(1, places[places.length - 1]);
  const shift = moved ? (1 + uniform()) * layout.pitch * (uniform() < 0.5 ? 1 : -1) : 0;
  return places.flatMap((y, i) => {
    const position = 12 + y + (bend * y * y) / span + 0.02 * layout.pitch * normal() + shift;
    const light = 8e4 * (1 + 0.1 * normal());
    const isSeen = lit.has(i + 1) && position > 1 && position < span + 22;
    return isSeen ? [{ position, light, truth: i + 1 }] : [];
  });
}

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
