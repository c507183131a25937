/** Arcs with known truth (arcs.ts, the frames beside the project): an identification is right or refused, never wrong. */
import { describe, expect, it } from "vitest";
import { CalibrationError } from "../../src/calibration/errors.js";
import { type IdentifiablePeak, type Identification, identify } from "../../src/calibration/identify.js";
import { type LineList, lampLines } from "../../src/calibration/lamps.js";
import { openStream } from "../../src/random/streams.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { type Arc, type ArcRecipe, makeArc, roughRange, SETUPS } from "./arcs.js";

const OTHERS = ["He", "Ne", "Ar", "Kr", "Xe", "Hg", "Cu"];

const SEEDS = 3;

interface Difficulty extends Partial<ArcRecipe> {
  /** Of the approximate range. */
  off: number;
  alsoNamed?: number;
  unnamed?: boolean;
}

const DIFFICULTIES: Record<string, Difficulty> = {
  "a good range": { off: 0.03 },
  "a rough range": { off: 0.25 },
  "lines lost": { off: 0.25, lost: 0.3 },
  "false peaks": { off: 0.25, falsePeaks: 0.7 },
  "lamps named that are off": { off: 0.25, alsoNamed: 2 },
  "a lamp that is not named": { off: 0.25, unnamed: true },
  "strengths far from the list": { off: 0.25, scatter: 0.8 },
  "poor centring": { off: 0.25, jitter: 0.2 },
  "only bright lines": { off: 0.25, depth: 10 },
  "the worst of all": { off: 0.3, falsePeaks: 0.5, lost: 0.25, scatter: 0.5, jitter: 0.1 },
};

interface Trial {
  arc: Arc;
  list: LineList;
  range: [number, number];
  nx: number;
  pixel: number;
}

function makeTrial(name: string, seed: number): Trial {
  const { off, alsoNamed = 0, unnamed = false, ...recipe } = DIFFICULTIES[name];
  const dice = openStream(seed, name);
  const between = (a: number, b: number) => a + (b - a) * dice.uniform();
  const { lamps, range } = SETUPS[Math.floor(dice.uniform() * SETUPS.length)];
  const nx = [512, 1024, 2048, 4096][Math.floor(dice.uniform() * 4)];
  const others = OTHERS.filter((lamp) => !lamps.includes(lamp));
  const other = () => others[Math.floor(dice.uniform() * others.length)];
  const named = [...lamps, ...Array.from({ length: alsoNamed }, other)];
  const arc = makeArc({
    seed,
    nx,
    range,
    lamps: unnamed ? [...lamps, other()] : lamps,
    bends: [between(-0.03, 0.03), between(-0.006, 0.006), between(-5e-4, 5e-4)],
    jitter: 0.03,
    depth: 300,
    lost: 0.05,
    falsePeaks: 0.1,
    fwhm: 2 + nx / 1024,
    scatter: 0.25,
    ...recipe,
  });
  return {
    arc,
    list: lampLines(named),
    range: roughRange(range, off, dice, off > 0.1 && dice.uniform() < 0.3),
    nx,
    pixel: Math.abs(range[1] - range[0]) / (nx - 1),
  };
}

/** Matched lines that lie over 1.5 px (of 1024) from where the truth has them, and how many there are. */
function wrongLines({ arc, list, nx, pixel }: Trial, { matches }: Identification): { wrong: number; all: number } {
  const limit = 1.5 * Math.max(1, nx / 1024) * pixel;
  const wrong = matches.filter(
    ({ peak, line }) => !(Math.abs(list.wavelength[line] - arc.truth(arc.peaks[peak].x)) < limit),
  );
  return { wrong: wrong.length, all: matches.length };
}

function verdict(trial: Trial): "right" | "refused" | string {
  try {
    const { wrong, all } = wrongLines(trial, identify(trial.arc.peaks, trial.list, trial.range, trial.nx));
    return wrong === 0 || (wrong === 1 && all > 15) ? "right" : `${wrong} of ${all} wrong`;
  } catch (error) {
    if (error instanceof CalibrationError) return "refused";
    throw error;
  }
}

describe("identification of seeded arcs", () => {
  it.each(Object.keys(DIFFICULTIES))("%s: right or refused", (name) => {
    const verdicts = Array.from({ length: SEEDS }, (_, seed) => verdict(makeTrial(name, seed)));
    expect(verdicts.filter((one) => one !== "right" && one !== "refused")).toEqual([]);
    expect(verdicts.filter((one) => one === "right").length).toBeGreaterThanOrEqual(SEEDS / 2);
  });

  it("with the lists of other lamps: refused", () => {
    for (let seed = 0; seed < SEEDS; seed++) {
      const trial = makeTrial("a good range", seed);
      const on = new Set(SETUPS.flatMap(({ lamps, range }) => (isNear(range, trial) ? lamps : [])));
      trial.list = lampLines(OTHERS.filter((lamp) => !on.has(lamp)));
      expect(verdict(trial)).toBe("refused");
    }
  });
});

const isNear = (range: [number, number], { arc, nx }: Trial) =>
  Math.abs((range[0] + range[1]) / 2 - arc.truth((nx - 1) / 2)) < 0.05 * Math.abs(range[1] - range[0]);

const NEON: ArcRecipe = {
  seed: 3,
  nx: 1024,
  range: [5800, 7430],
  lamps: ["Ne"],
  bends: [0.015, -0.003, 0],
  jitter: 0.03,
  depth: 100,
  lost: 0,
  falsePeaks: 0,
  fwhm: 2.5,
  scatter: 0.1,
};

const refusal = (peaks: IdentifiablePeak[], list: LineList, range: [number, number] = [5800, 7430]) => {
  try {
    identify(peaks, list, range, 1024);
  } catch (error) {
    return `${(error as Error).name}: ${(error as Error).message}`;
  }
  return "identified";
};

describe("an identification", () => {
  it("tells direction, dispersion, scatter and the runner-up", () => {
    const { peaks, truth } = makeArc({ ...NEON, range: [7430, 5800] });
    const found = identify(peaks, lampLines(["Ne"]), [5700, 7500], 1024);
    expect(found.reversed).toBe(true);
    expect(found.matches.length).toBeGreaterThan(15);
    expect(found.rms).toBeLessThan(0.15);
    expect(found.score).toBeGreaterThan(found.runnerUp + 10);
    for (const { peak } of found.matches) {
      const { x } = peaks[peak];
      expect(Math.abs(legendreValue(found.legendre, legendreArgument(x, 1024)) - truth(x))).toBeLessThan(0.6);
    }
  });

  it("does not depend on the order of the peaks", () => {
    const { peaks } = makeArc(NEON);
    const list = lampLines(["Ne", "Ar"]);
    const found = identify(peaks, list, [5700, 7500], 1024);
    const turned = identify([...peaks].reverse(), list, [5700, 7500], 1024);
    const pairs = ({ matches }: Identification, of: IdentifiablePeak[]) =>
      matches.map(({ peak, line }) => `${of[peak].x} ${line}`).sort();
    expect(pairs(turned, [...peaks].reverse())).toEqual(pairs(found, peaks));
  });

  it("is refused with too few peaks, too few lines, a range without length", () => {
    const { peaks } = makeArc(NEON);
    expect(refusal(peaks.slice(0, 4), lampLines(["Ne"]))).toBe(
      `CalibrationError: The arc has 4 peaks, but at least 5 are needed to identify its lines (the list has ${lampLines(["Ne"]).wavelength.length}); is the lamp on, and exposed long enough?`,
    );
    expect(refusal(peaks, lampLines(["Zn"]))).toMatch(
      /^CalibrationError: The list has \d lines within 30 % of 5800 to 7430 Å/,
    );
    expect(refusal(peaks, lampLines(["Ne"]), [6000, 6000])).toContain("two different wavelengths over 0 were expected");
    expect(refusal([...peaks, { ...peaks[0], x: Number.NaN }], lampLines(["Ne"]))).toContain("RangeError");
  });

  it("is refused where lines stand in even distances: any shift reads as well", () => {
    const wavelength = Float64Array.from({ length: 60 }, (_, i) => 5000 + 50 * i);
    const comb: LineList = {
      wavelength,
      medium: "air",
      strength: wavelength.map(() => Number.NaN),
      lamp: Array.from(wavelength, () => "comb"),
      source: "made up",
    };
    const peaks = Array.from({ length: 30 }, (_, i) => ({ x: 20.3 + 33 * i, error: 0.02, electrons: 1000 }));
    expect(refusal(peaks, comb)).toMatch(/can be read in two ways, \d+ to \d+ Å \(\d+ explained\) and \d+ to \d+ Å/);
  });

  it("is refused with the wrong lamp, naming it", () => {
    const { peaks } = makeArc(NEON);
    expect(refusal(peaks, lampLines(["Kr", "Hg"]))).toMatch(
      /could not be identified with the \d+ lines of the list \(.*Kr.*\): .*check which lamps were on/,
    );
  });
});
