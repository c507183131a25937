/** Arcs of the frames beside the project: the truth's lines as peaks, with noise, losses and false ones added. */
import { existsSync } from "node:fs";
import { describe, expect, it } from "vitest";
import { type IdentifiablePeak, identify } from "../../src/calibration/identify.js";
import { lampLines } from "../../src/calibration/lamps.js";
import { readTable } from "../../src/fits/table.js";
import { openStream } from "../../src/random/streams.js";

const FRAMES = new URL("../../../shared/frames/", import.meta.url).pathname;
const here = existsSync(FRAMES);
if (!here) console.log("frames beside the project are not there: their tests are skipped");

interface TruePeak extends IdentifiablePeak {
  /** Å */
  wave: number;
}

const FWHM = 2.2;

/** The lines of one fibre, from 1; those nearer than 1.2 widths are one peak, named after the brighter. */
async function peaksOf(scene: string, fibre: number, seed: number): Promise<TruePeak[]> {
  const { columns } = await readTable(`${FRAMES}${scene}/truth/arc_01.fits.gz`, "LINES");
  const column = (name: string) => columns.find((one) => one.name === name)?.data as Float64Array;
  const [fibres, x, wave, electrons] = ["FIBRE", "X", "WAVE", "ELECTRONS"].map(column);
  const rows = Array.from(fibres.keys()).filter((i) => fibres[i] === fibre);
  const dice = openStream(seed, scene, fibre);
  const out: TruePeak[] = [];
  for (const i of rows.sort((a, b) => x[a] - x[b])) {
    const last = out[out.length - 1];
    if (last && x[i] - last.x < 1.2 * FWHM) {
      const sum = last.electrons + electrons[i];
      if (electrons[i] > last.electrons) last.wave = wave[i];
      Object.assign(last, { x: (last.x * last.electrons + x[i] * electrons[i]) / sum, electrons: sum });
    } else if (dice.uniform() > 0.1) {
      out.push({ x: x[i] + 0.05 * dice.normal(), error: 0.05, electrons: electrons[i], fwhm: FWHM, wave: wave[i] });
    }
  }
  for (let i = 0; i < 6; i++) {
    const nx = scene === "night" ? 1024 : 2048;
    out.push({
      x: nx * dice.uniform(),
      error: 0.05,
      electrons: 3000 + 3e4 * dice.uniform(),
      fwhm: 1.2,
      wave: Number.NaN,
    });
  }
  return out;
}

const SCENES: Record<string, { nx: number; fibres: number[]; ranges: [number, number][] }> = {
  night: {
    nx: 1024,
    fibres: [1, 41, 84],
    ranges: [
      [5780, 7420],
      [5300, 7500],
      [7700, 6300],
    ],
  },
  crowded: {
    nx: 2048,
    fibres: [5, 90, 168],
    ranges: [
      [7380, 5580],
      [7700, 5400],
      [5900, 7900],
    ],
  },
};

describe.skipIf(!here)("arcs of the frames beside the project", () => {
  it.each(Object.keys(SCENES))("%s: every match is the truth's, whatever the range said", async (scene) => {
    const { nx, fibres, ranges } = SCENES[scene];
    const list = lampLines(["Ne", "Ar", "Hg", "Cu"]);
    for (const [i, range] of ranges.entries()) {
      const peaks = await peaksOf(scene, fibres[i], 11 + i);
      const found = identify(peaks, list, range, nx);
      expect(found.reversed).toBe(i === 2);
      expect(found.matches.length).toBeGreaterThan(20);
      const off = found.matches.filter(
        ({ peak, line }) => !(Math.abs(list.wavelength[line] - peaks[peak].wave) < 0.02),
      );
      // A false peak may happen to lie on a line that was lost.
      expect(off.filter(({ peak }) => !Number.isNaN(peaks[peak].wave))).toEqual([]);
      expect(off.length).toBeLessThanOrEqual(1);
      expect(found.rms).toBeLessThan(0.2);
    }
  });
});
