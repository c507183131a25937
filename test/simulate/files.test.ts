import { createHash } from "node:crypto";
import { mkdtempSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { parse } from "smol-toml";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { type SimulationFiles, writeSimulation } from "../../src/simulate/files.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { EVERYTHING, smallScene } from "./benches.js";

const scene = smallScene({
  ...EVERYTHING,
  // Its bad row beside the fibres, so that nothing is lost in it.
  detector: EVERYTHING.detector.replace("bad_columns = [31]", "bad_columns = [3]"),
  rest: EVERYTHING.rest.replace("rate = 40", "rate = 0").replace("[7200, 6200]", "[7200, 6200]\nown_place = 0.4"),
  exposures: `${EVERYTHING.exposures}\n[[exposure]]\nname = "arc_01"\nkind = "arc"\nseconds = 10`,
});
let dir: string;
let files: SimulationFiles;
const seen: string[] = [];

beforeAll(async () => {
  dir = mkdtempSync(join(tmpdir(), "simulate-"));
  files = await writeSimulation(dir, scene, {
    onExposure: (name, done, total) => seen.push(`${name} ${done}/${total}`),
  });
});
afterAll(() => rmSync(dir, { recursive: true }));

function digest(folder: string): string[] {
  return (readdirSync(folder, { recursive: true }) as string[])
    .filter((name) => /\.(fits|toml)$/.test(name))
    .sort()
    .map(
      (name) =>
        `${name} ${createHash("sha256")
          .update(readFileSync(join(folder, name)))
          .digest("hex")}`,
    );
}

describe("a simulated night on disk", () => {
  test("has a raw frame for each exposure and the truth for those with fibres' light", () => {
    expect((readdirSync(dir, { recursive: true }) as string[]).sort()).toEqual([
      ...["badmask.fits", "raw", "raw/arc_01.fits", "raw/bias_01.fits", "raw/fflat_01.fits", "raw/sci_01.fits"],
      ...["spectrograph.toml", "truth", "truth/arc_01.fits", "truth/fflat_01.fits", "truth/sci_01.fits"],
    ]);
    expect(files.exposures.map(({ truth }) => truth === undefined)).toEqual([true, false, false, false]);
    expect(seen).toEqual(["bias_01 0/4", "fflat_01 1/4", "sci_01 2/4", "arc_01 3/4"]);
  });

  test("is the same, byte for byte, when written again elsewhere", async () => {
    const elsewhere = mkdtempSync(join(tmpdir(), "simulate-"));
    await writeSimulation(elsewhere, scene);
    expect(digest(elsewhere)).toEqual(digest(dir));
    rmSync(elsewhere, { recursive: true });
  });

  test("is not written over unless asked, and then nothing is touched", async () => {
    const before = digest(dir);
    await expect(writeSimulation(dir, smallScene({ ...EVERYTHING, seed: 99 }))).rejects.toThrow(
      /spectrograph\.toml.*exists already/,
    );
    expect(digest(dir)).toEqual(before);
  });

  test("cannot go where a file stands", async () => {
    const file = join(dir, "note.txt");
    writeFileSync(file, "x");
    await expect(writeSimulation(file, scene)).rejects.toThrow(
      /note\.txt: this folder cannot be made \(\w+\); give one that can be written to$/,
    );
    rmSync(file);
  });

  test("comes with the spectrograph as an observer would describe it", () => {
    const text = parse(readFileSync(files.spectrograph, "utf8")) as Record<string, Record<string, unknown>>;
    expect(text.slit).toEqual({ blocks: [7, 9], pitch: 5.3, gap: 8, dead: [], sky: [] });
    expect(text.detector.bad_pixels).toBe("badmask.fits");
    // Overscan before the pixels in the first column of amplifiers, after them in the others; each strip is as wide as
    // the wider need in its column: 12 and 20.
    expect(text.detector.amplifier).toEqual([
      { gain: 1.1, read_noise: 3, data: "[13:73,1:75]", overscan: "[1:12,1:75]", place: "[1:61,1:75]" },
      { gain: 1.4, read_noise: 5, data: "[74:133,1:75]", overscan: "[134:149,1:75]", place: "[62:121,1:75]" },
      { gain: 0.9, read_noise: 2, data: "[13:73,76:150]", overscan: "[1:8,76:150]", place: "[1:61,76:150]" },
      { gain: 1.7, read_noise: 4, data: "[74:133,76:150]", overscan: "[134:153,76:150]", place: "[62:121,76:150]" },
    ]);
  });

  test.skipIf(judgeMissing("fitsverify"))("passes fitsverify, file by file", () => {
    for (const name of readdirSync(dir, { recursive: true }) as string[]) {
      if (name.endsWith(".fits")) expect(fitsverify(join(dir, name)), name).toEqual([]);
    }
  });

  test.skipIf(judgeMissing("astropy"))(
    "gives astropy, reading headers only, the electrons that the truth lists",
    () => {
      const pulls = JSON.parse(python(OBSERVER, [dir])) as {
        n: number;
        mean: number;
        rms: number;
        lines: number;
        overlap: number;
        off: number;
        dim: number;
      };
      expect(pulls.n).toBe(150);
      expect(pulls.overlap).toBe(0);
      // 150 column sums with unit variance: the mean within 4.4/√150, the rms within 4.4/√300 of 1.
      expect(Math.abs(pulls.mean)).toBeLessThan(0.36);
      expect(Math.abs(pulls.rms - 1)).toBeLessThan(0.26);
      expect(pulls.lines).toBeGreaterThan(100);
      // Wavelengths of the scene are linear in the column. Throughput varies little over half a pixel; the central pixel of
      // a line of FWHM 2.2 px holds at least erf-wise 0.37 of it.
      expect(pulls.off).toBeLessThan(1e-9);
      expect(pulls.dim).toBe(0);
    },
  );
});

/** Assembles the science frame by its header alone, takes off overscan and the bias frame, and compares the sum of each
 * dispersion column with FLUX and SCATTERED, in units of its noise. The response (1 % a pixel) is part of the noise. */
const OBSERVER = `
import json, re, sys, numpy as np
from astropy.io import fits
d = sys.argv[1]
def section(text):
    x1, x2, y1, y2 = map(int, re.match(r"\\[(\\d+):(\\d+),(\\d+):(\\d+)\\]", text).groups())
    return slice(y1 - 1, y2), slice(x1 - 1, x2)
def assemble(name):
    with fits.open(d + "/raw/" + name + ".fits", checksum=True) as f: h, raw = f[0].header, f[0].data.astype(float)
    out = np.full((150, 121), np.nan); noise = np.zeros((150, 121)); taken = np.zeros(raw.shape, int)
    for a in range(1, h["NAMPS"] + 1):
        data, bias = section(h["DATASEC%d" % a]), section(h["BIASSEC%d" % a])
        taken[data] += 1; taken[bias] += 1
        level = np.polyval(np.polyfit(np.arange(75), raw[bias].mean(1), 4), np.arange(75))
        place = section(h["CCDSEC%d" % a])
        out[place] = (raw[data] - level[:, None]) * h["GAIN%d" % a]
        noise[place] = h["RDNOISE%d" % a] ** 2 + h["GAIN%d" % a] ** 2 / 12
    assert h["DISPAXIS"] == 2 and h["BZERO"] == 32768
    return out.T, noise.T, (taken > 1).sum()
frame, noise, overlap = assemble("sci_01")
bias, bias_noise, _ = assemble("bias_01")
good = fits.getdata(d + "/badmask.fits").T == 0
with fits.open(d + "/truth/sci_01.fits", checksum=True) as f:
    flux, trace, scattered = f["FLUX"].data.astype(float), f["TRACE"].data, f["SCATTERED"].data.astype(float)
with fits.open(d + "/truth/arc_01.fits") as f:
    t, wave, arc = f["LINES"].data, f["WAVE"].data, f["FLUX"].data
    lines = len(t)
    inside = t[(t["X"] > 1) & (t["X"] < 148)]
    # Where the table puts a line, the fibre's wavelengths say the same and its spectrum has a peak.
    off = max(abs(np.interp(r["X"], np.arange(150), wave[r["FIBRE"] - 1]) - r["WAVE"]) for r in inside)
    at = np.round(inside["X"]).astype(int)
    dim = (arc[inside["FIBRE"] - 1, at] < 0.35 * inside["ELECTRONS"]).sum()
net = frame - bias - 0.02 * 900
row = np.flatnonzero(~good.any(1))[0]
net[row] = (net[row - 1] + net[row + 1]) / 2
variance = noise + bias_noise + np.maximum(net, 0) + (0.01 * net) ** 2 + 18
total = flux.sum(0) + scattered.sum(0)
sigma = np.sqrt(variance.sum(0))
pull = (net.sum(0) - total) / sigma
print(json.dumps(dict(n=len(pull), mean=pull.mean(), rms=np.sqrt((pull ** 2).mean()), lines=lines, overlap=int(overlap), off=float(off), dim=int(dim))))
`;
