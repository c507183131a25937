/** Calibrations that went through a file correct as those that did not, to the bit. */
import { mkdtempSync, readFileSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { beforeAll, describe, expect, it } from "vitest";
import { type Calibrations, makeCalibrations, noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { detectorHdus, writeDetector } from "../../src/detector/detectorFile.js";
import { loadCalibrations } from "../../src/detector/loadCalibrations.js";
import type { RawImage } from "../../src/detector/raw.js";
import { readDetector } from "../../src/detector/readDetector.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { type Cards, ONE_AMPLIFIER, rawFrame, seeded } from "./rawFrames.js";

const [NX, NY, GAIN] = [124, 80, 1.6];
const folder = mkdtempSync(join(tmpdir(), "hatchel-detector-"));
const options = { version: "1.2.3", options: ["bias b*.fits"] };

function shot(name: string, seed: number, kind: string, seconds: number, mean: number, cards: Cards = {}): RawImage {
  const next = seeded(seed);
  const all = { ...ONE_AMPLIFIER, IMAGETYP: kind, EXPTIME: seconds, ...cards };
  const frame = rawFrame(name, NX, NY, all, (x, y) => {
    const level = 1000 + ((x * 7 + y * 3) % 5) + (3.3 / GAIN) * normalDeviate(next);
    return x < 100 ? level + poissonDeviate(mean * (1 + 0.01 * ((x * 5 + y) % 3)), next) / GAIN : level;
  });
  return { ...frame, checksum: `${name} ${seed}` };
}

const series = (n: number, kind: string, seconds: number, mean: number, seed: number) =>
  Array.from({ length: n }, (_, i) => shot(`${kind}${i + 1}.fits`, seed + i, kind, seconds, mean));

/** Tall, dispersion along axis 2: what is turned must come back turned. */
const TURNED: Cards = { DISPAXIS: 2 };

async function calibrations(cards: Cards = {}): Promise<Calibrations> {
  const told = (frames: RawImage[]) => frames.map((one) => ({ ...one, header: one.header }));
  const pixels = new Float32Array(100 * 80);
  pixels[733] = 1;
  const make = (kind: string, seconds: number, mean: number, seed: number, n = 3) =>
    told(Array.from({ length: n }, (_, i) => shot(`${kind}${i}.fits`, seed + i, kind, seconds, mean, cards)));
  const bias = make("bias", 0, 0, 10, 4);
  bias[1] = shot("wärm.fits", 60, "bias", 0, 40, cards);
  return makeCalibrations({
    ...{ bias, dark: make("dark", 900, 4, 20), pixelFlat: make("flat", 5, 20000, 30) },
    badPixels: { name: "bad.fits", nx: 100, ny: 80, checksum: "b0", data: pixels },
  });
}

describe.each([
  ["dispersion along axis 1", {}],
  ["dispersion along axis 2", TURNED],
])("a file of detector calibrations, %s", (_, cards) => {
  let made: Calibrations;
  let path: string;
  beforeAll(async () => {
    made = await calibrations(cards);
    path = join(folder, `detector${Object.keys(cards).length}.fits`);
    await writeDetector(path, made, options);
  });

  it("comes back to the bit", async () => {
    const [file, ...inputs] = (await readDetector(path)).inputs;
    expect([file.role, file.name.startsWith("detector"), file.checksum]).toEqual([
      "detector",
      true,
      expect.stringMatching(/^[0-9a-f]{16}$/),
    ]);
    const { badPixels, ...read } = await readDetector(path);
    const { badPixels: given, ...expected } = made;
    expect({ ...read, inputs }).toEqual(expected);
    expect(badPixels).toEqual({ name: "bad.fits", checksum: "b0", nx: 100, ny: 80, pixels: [733] });
    expect(given!.name).toBe("bad.fits");
    expect(made.stacks![0].frames[1]).toMatchObject({ name: "wärm.fits", used: false });
  });

  it("corrects a frame as its calibrations do", async () => {
    const science = shot("sci.fits", 77, "object", 1200, 900, cards);
    const [a, b] = [correctFrame(science, made), correctFrame(science, await loadCalibrations({ detector: path }))];
    expect(b).toEqual(a);
  });

  it("refuses a frame of another readout, and warns of another gain", async () => {
    const read = await readDetector(path);
    const binned = shot("binned.fits", 78, "object", 1200, 900, { ...cards, CCDSUM: "2 2" });
    expect(() => correctFrame(binned, read)).toThrow("come from different readouts");
    const other = shot("other.fits", 78, "object", 1200, 900, { ...cards, GAIN: 1.7 });
    expect(correctFrame(other, read).warnings).toContain(
      "other.fits: amplifier 1 has a gain of 1.7 e⁻/ADU, but 1.6 in the calibration frames (bias0.fits); take those of the frame's own gain, or give the right gain in the spectrograph file.",
    );
  });

  it.skipIf(judgeMissing("fitsverify"))("passes fitsverify", () => {
    expect(fitsverify(path)).toEqual([]);
  });

  it.skipIf(judgeMissing("astropy"))("is read by astropy: the same pixels, the original inputs in HISTORY", () => {
    const script = `
import sys, json, numpy as np
from astropy.io import fits
with fits.open(sys.argv[1], checksum=True) as f:
    print(json.dumps({
        "names": [h.name for h in f],
        "bias": f["BIAS"].data.astype(float)[:3].ravel().tolist(),
        "units": [f[n].header.get("BUNIT") for n in ("BIAS", "BIAS_VAR", "DARK", "DARK_VAR")],
        "history": [str(line) for line in f[0].header["HISTORY"]],
        "used": [bool(v) for v in f["FRAMES"].data["USED"]],
    }))`;
    const seen = JSON.parse(python(script, [path]));
    const nx = made.geometry!.dispersionAxis === 1 ? 100 : 80;
    expect(seen.bias).toEqual(Array.from(made.bias!.mean.subarray(0, 3 * nx)));
    expect(seen.units).toEqual(["electron", "electron2", "electron/s", "electron2 s-2"]);
    expect(seen.history).toContain("input bias2.fits checksum bias2.fits 12");
    expect(seen.history.join(" ")).not.toContain("rm.fits");
    expect(seen.used).toEqual([true, false, ...new Array(9).fill(true)]);
  });
});

describe("a file that is none of detector calibrations", () => {
  it("is refused in a sentence: another file, a newer format, damage, sections that are not its digest's", async () => {
    const path = join(folder, "sound.fits");
    await writeDetector(path, await makeCalibrations({ bias: series(2, "bias", 0, 0, 1) }), options);
    const bytes = readFileSync(path);
    const changed = (name: string, change: (copy: Buffer) => void) => {
      const copy = Buffer.from(bytes);
      change(copy);
      writeFileSync(join(folder, name), copy);
      return readDetector(join(folder, name));
    };
    const replace = (from: string, to: string) => (copy: Buffer) => {
      expect(copy.includes(from)).toBe(true);
      copy.write(to, copy.indexOf(from), "latin1");
    };
    await expect(changed("a.fits", replace("DETVERS ", "OTHER   "))).rejects.toThrow(
      /a\.fits.*: this is no file of detector calibrations; give one that 'hatchel stack' wrote/,
    );
    await expect(
      changed("b.fits", replace("DETVERS =                    1", "DETVERS =                    2")),
    ).rejects.toThrow("format 2, but 1 is the newest known");
    await expect(
      changed("c.fits", replace("DETBIN1 =                    1", "DETBIN1 =                    3")),
    ).rejects.toThrow("its readout's digest is not that of its sections");
    await expect(
      changed("d.fits", (copy) => {
        const at = copy.indexOf("EXTNAME = 'BIAS_VAR'") + 2880 * 2;
        copy[at] ^= 1;
      }),
    ).rejects.toThrow("a checksum is wrong, so the file has been changed or damaged");
  });

  it("is not made of nothing", () => {
    expect(() => detectorHdus(noCalibrations(), options)).toThrow("give one at least");
  });
});
