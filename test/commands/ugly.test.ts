/** Damaged and odd frames of an independent forward model, when they lie beside the project, through the whole command:
 * right where they can be, flagged where a value is lost, else refused in one sentence. */
import { existsSync, mkdtempSync, readdirSync, readFileSync, rmSync, symlinkSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { readSpectra } from "../../src/extraction/file.js";
import { type Spectra, UNUSABLE } from "../../src/extraction/spectra.js";
import { readImage } from "../../src/fits/image.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { scoreByDecade } from "../../src/report/truth.js";
import { readTramlines } from "../../src/tramlines/file.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { hatchel, lines } from "./spawned.js";

const FRAMES = new URL("../../../shared/frames/", import.meta.url).pathname;
const here = existsSync(`${FRAMES}ugly/expect.json`);
if (!here) console.log("frames beside the project are not there: their tests are skipped");

const RAW = "frames/night/raw";
const SOUND = `${RAW}/sci_01.fits`;
const ALIKE = ["extension.fits", "rice.fits.fz", "packed.fits.gz", "trailing.fits"];
const REFUSED: [frame: string, sentence: RegExp][] = [
  [
    "cropped.fits",
    /^hatchel: cropped\.fits: DATASEC: "\[1:1024,1:476\]" ends at y = 476, but the image ends at 430; [^.]+\.\n$/,
  ],
  [
    "axis2.fits",
    /^hatchel: axis2\.fits: DATASEC: "\[1:1024,1:476\]" ends at x = 1024, but the image ends at 476; it would fit with the axes exchanged: [^.]* dispersion_axis in the spectrograph file\.\n$/,
  ],
  [
    "signed.fits",
    /^hatchel: signed\.fits: levels from -\d+ to -\d+ ADU, but a detector's counts are not negative; a BZERO of 32768 seems to be lost, restore it in the header\.\n$/,
  ],
  [
    "truncated.fits",
    /^hatchel: frames\/ugly\/truncated\.fits: HDU 0: the file ends after 553104 of 1005312 bytes of data; fetch it again\.\n$/,
  ],
  [
    "empty.fits",
    /^hatchel: frames\/ugly\/empty\.fits: 0 bytes where a FITS file has at least 2880; fetch it again\.\n$/,
  ],
];
const OTHERS = ["nan_rows.fits", "zero_columns.fits", "bleed.fits", "flat_half_lit.fits", "flat_moved.fits"];

let cwd: string;
let known: string[];
let sound: Spectra;
let soundSaid: string;
let tramlines: Tramlines;

beforeAll(async () => {
  if (!here) return;
  cwd = mkdtempSync(join(tmpdir(), "hatchel-"));
  symlinkSync(FRAMES, join(cwd, "frames"));
  const { slit } = JSON.parse(readFileSync(`${FRAMES}night/scene.json`, "utf8"));
  writeFileSync(join(cwd, "night.toml"), spectrographToml(slit));
  known = ["--spectrograph", "night.toml", "--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];
  known.push("--dark", `${RAW}/dark_01.fits`);
  known.push(
    "--pixel-flat",
    `${RAW}/dflat_01.fits`,
    `${RAW}/dflat_02.fits`,
    "--bad-pixels",
    "frames/night/badmask.fits",
  );
  good(["trace", `${RAW}/fflat_01.fits`, "-o", "tramlines.fits", ...known]);
  tramlines = await readTramlines(join(cwd, "tramlines.fits"));
  [sound, soundSaid] = await extracted(SOUND, "sound.fits");
});
afterAll(() => {
  if (here) rmSync(cwd, { recursive: true });
});

/** The scene counts slit positions from 0, the spectrograph file from 1. */
function spectrographToml(
  slit: { positions: number; per_block: number; [key: string]: unknown },
  detector = "",
): string {
  const blocks = new Array(slit.positions / slit.per_block).fill(slit.per_block);
  const fromOne = (list: unknown) => JSON.stringify((list as number[]).map((position) => position + 1));
  return `${detector}[slit]
blocks = ${JSON.stringify(blocks)}
pitch = ${slit.pitch_px}
gap = ${slit.extra_gap_px}
dead = ${fromOne(slit.dead)}
sky = ${fromOne(slit.sky_fibres)}
`;
}

function good(args: string[]) {
  const run = hatchel(args, { cwd });
  if (run.code !== 0) throw new Error(`exit code ${run.code}: ${run.stderr}`);
  return run;
}

const extraction = (frame: string, output: string, from = "tramlines.fits") => [
  ...["extract", frame, "--tramlines", from, "-o", output],
  ...known,
];

/** Spectra of a frame, and what was said on the way, without the frame's name. */
async function extracted(frame: string, output: string): Promise<[Spectra, string]> {
  const { stderr } = good(extraction(frame, output));
  return [await readSpectra(join(cwd, output)), stderr.replaceAll(frame.split("/").pop() as string, "FRAME")];
}

function centre(of: Tramlines, k: number, x: number): number {
  const n = of.degree + 1;
  return legendreValue(of.legendre, legendreArgument(x, of.nx), k * n, n);
}

/** Distance in σ of the undamaged frame's spectra at the points that both may use, sorted, without those of `lost`. */
function distances(spectra: Spectra, lost: (k: number, x: number) => boolean): Float64Array {
  const found: number[] = [];
  for (let k = 0; k < spectra.nFibre; k++) {
    for (let x = 0; x < spectra.nx; x++) {
      const at = k * spectra.nx + x;
      if (((spectra.flags[at] | sound.flags[at]) & UNUSABLE) !== 0 || lost(k, x)) continue;
      found.push(Math.abs(spectra.flux[at] - sound.flux[at]) / Math.sqrt(sound.variance[at]));
    }
  }
  return Float64Array.from(found).sort();
}

const quantile = (sorted: Float64Array, share: number) => sorted[Math.floor(share * (sorted.length - 1))];

/** Points that the damage should have cost and did not, or cost and should not have; told as "fibre k, column x". */
function misflagged(spectra: Spectra, lost: (k: number, x: number) => boolean | undefined): string[] {
  const wrong: string[] = [];
  for (let k = 0; k < spectra.nFibre; k++) {
    for (let x = 0; x < spectra.nx; x++) {
      const at = k * spectra.nx + x;
      const expected = lost(k, x);
      if (expected === undefined || (sound.flags[at] & UNUSABLE) !== 0) continue;
      const flagged = (spectra.flags[at] & UNUSABLE) !== 0;
      if (flagged !== expected || (!flagged && !Number.isFinite(spectra.flux[at]))) {
        wrong.push(`fibre ${k + 1}, column ${x}`);
      }
    }
  }
  return wrong;
}

const deadOf = ({ state }: Tramlines) => state.flatMap((one, k) => (one === "dead" ? [k + 1] : []));

describe.skipIf(!here)("odd frames through the command", () => {
  test("are all tried", () => {
    const { frames } = JSON.parse(readFileSync(`${FRAMES}ugly/expect.json`, "utf8"));
    expect(Object.keys(frames).sort()).toEqual([...ALIKE, ...REFUSED.map(([frame]) => frame), ...OTHERS].sort());
  });

  test("the undamaged one gives the true light, in the fibres where it is", async () => {
    const { data: flux } = await readImage(`${FRAMES}night/truth/sci_01.fits.gz`, { hdu: "FLUX" });
    const lit = tramlines.state.map((state) => state !== "dead");
    for (const score of scoreByDecade(sound, { flux, lit }).filter(({ from }) => from === 1e3 || from === 1e4)) {
      expect(score.nPoint).toBeGreaterThan(5000);
      // What is asked here is that no fibre is another one; how near a profile comes is asked elsewhere.
      expect(Math.abs(score.bias as number)).toBeLessThan(0.03);
    }
  });

  test.each(ALIKE)("%s holds the same pixels and gives the same spectra", async (frame) => {
    const [spectra, said] = await extracted(`frames/ugly/${frame}`, `alike-${frame}.fits`);
    for (const image of ["flux", "variance", "flags", "neighbourCovariance"] as const) {
      expect(spectra[image], image).toEqual(sound[image]);
    }
    const more =
      frame === "trailing.fits" ? ["warning: frames/ugly/FRAME: 1000 bytes after the last HDU are left aside."] : [];
    expect(lines(said)).toEqual([...lines(soundSaid), ...more]);
  });

  test.each(REFUSED)("%s is refused in one sentence", (frame, sentence) => {
    const before = readdirSync(cwd).sort();
    const args = ["extract", `frames/ugly/${frame}`, "--tramlines", "tramlines.fits", "-o", "refused.fits"];
    const run = hatchel([...args, "--spectrograph", "night.toml"], { cwd });
    expect(run).toMatchObject({ code: 1, stdout: "", stderr: expect.stringMatching(sentence) });
    expect(readdirSync(cwd).sort()).toEqual(before);
  });

  test("axis2.fits told right does not go with tramlines of upright frames", () => {
    const detector = `[detector]
dispersion_axis = 2
[[detector.amplifier]]
data = "[1:476,1:1024]"
overscan = "[1:476,1025:1056]"
place = "[1:476,1:1024]"
`;
    const { slit } = JSON.parse(readFileSync(`${FRAMES}night/scene.json`, "utf8"));
    writeFileSync(join(cwd, "turned.toml"), spectrographToml(slit, detector));
    const args = ["extract", "frames/ugly/axis2.fits", "--tramlines", "tramlines.fits", "-o", "refused.fits"];
    const run = hatchel([...args, "--spectrograph", "turned.toml"], { cwd });
    expect(run).toMatchObject({ code: 1, stdout: "" });
    expect(run.stderr).toMatch(
      /^hatchel: axis2\.fits: .*tramlines\.fits belong to .* of another readout window \(sections, axis or binning differ\); trace a flat from the same readout window as the frame\.\n$/,
    );
    expect(existsSync(join(cwd, "refused.fits"))).toBe(false);
  });

  test("nan_rows.fits loses the fibres of its lost rows, and no other one's light", async () => {
    const [spectra, said] = await extracted("frames/ugly/nan_rows.fits", "nan.fits");
    expect(said).toContain("warning: FRAME: 204800 pixels have no value (NaN or blank) and are masked.\n");
    // Rows 0 to 199 hold nothing; a fibre's profile reaches about 4 px.
    const lost = (k: number, x: number) => {
      const y = centre(tramlines, k, x);
      return y < 198.5 ? true : y > 204 ? false : undefined;
    };
    // The background, told by the rows that are left, moves a cosmic ray here and there over the threshold.
    expect(misflagged(spectra, lost).length).toBeLessThan(60);
    for (let at = 0; at < 20 * spectra.nx; at++) expect(spectra.flux[at]).toBeNaN();
    // Scattered light is seen in half of the rows only, which moves faint fibres by a part of their error.
    const off = distances(spectra, (k, x) => lost(k, x) !== false);
    expect(off.length).toBeGreaterThan(45_000);
    expect(quantile(off, 0.5)).toBeLessThan(0.3);
    expect(quantile(off, 0.95)).toBeLessThan(0.8);
  });

  test("zero_columns.fits has no value in its 120 lost columns, and the same ones beside them", async () => {
    const [spectra, said] = await extracted("frames/ugly/zero_columns.fits", "zero.fits");
    expect(said).toContain("warning: FRAME: 120 columns hold one constant (dropped readout) and are masked.\n");
    const lost = (_k: number, x: number) => x >= 300 && x <= 419;
    expect(misflagged(spectra, lost)).toEqual([]);
    for (let k = 0; k < 84; k++) expect(spectra.flux[k * spectra.nx + 355]).toBeNaN();
    // A cosmic ray at the threshold may be judged otherwise, and the background is told by other columns: its standard error of
    // 0.2 e⁻ a pixel is a tenth or two of a faint fibre's.
    const off = distances(spectra, lost);
    expect(off.length).toBeGreaterThan(70_000);
    expect(quantile(off, 0.999)).toBeLessThan(0.5);
  });

  test("bleed.fits is saturated where its pixels are, and the same elsewhere", async () => {
    const [spectra, said] = await extracted("frames/ugly/bleed.fits", "bleed.fits");
    expect(said).toMatch(/^warning: FRAME: 1\.\d % of its pixels are saturated\.$/m);
    const { data, nx } = await readImage(join(cwd, "frames/ugly/bleed.fits"));
    const full = (x: number, y: number) => data[Math.round(y) * nx + x] >= 65535;
    const lost = (k: number, x: number) => {
      const y = centre(tramlines, k, x);
      if (y < 8 || y > 467) return undefined;
      if (full(x, y)) return true;
      // Charge beyond the full pixels is not trusted for a few pixels along the bleed.
      for (let row = Math.floor(y) - 8; row <= y + 8; row++) if (full(x, row)) return undefined;
      return false;
    };
    expect(misflagged(spectra, lost)).toEqual([]);
    const off = distances(spectra, (k, x) => lost(k, x) !== false);
    expect(off.length).toBeGreaterThan(80_000);
    expect(quantile(off, 0.9999)).toBeLessThan(0.5);
  });

  test("flat_half_lit.fits names its lit fibres rightly and tells the dark ones", async () => {
    const run = good(["trace", "frames/ugly/flat_half_lit.fits", "-o", "half.fits", ...known]);
    expect(run.stderr).toMatch(
      /^warning: .*: no light in fibres 43–65, 67–84, not listed as dead in the slit layout; .+$/m,
    );
    const half = await readTramlines(join(cwd, "half.fits"));
    expect(deadOf(half)).toEqual([13, ...Array.from({ length: 42 }, (_, i) => 43 + i)]);
    for (let k = 0; k < 42; k++) {
      for (const x of [20, 400, 1000]) {
        expect(Math.abs(centre(half, k, x) - centre(tramlines, k, x)), `fibre ${k + 1}`).toBeLessThan(0.1);
      }
    }
  });

  test("flat_moved.fits, 8 px up, keeps its names", async () => {
    good(["trace", "frames/ugly/flat_moved.fits", "-o", "moved.fits", ...known]);
    const moved = await readTramlines(join(cwd, "moved.fits"));
    expect(deadOf(moved)).toEqual(deadOf(tramlines));
    for (let k = 0; k < 84; k++) {
      for (const x of [20, 400, 1000]) {
        expect(Math.abs(centre(moved, k, x) - 8 - centre(tramlines, k, x)), `fibre ${k + 1}`).toBeLessThan(0.1);
      }
    }
  });

  test.each(["half.fits", "moved.fits"])("a frame whose light contradicts %s is refused", (from) => {
    const run = hatchel(extraction(SOUND, `refused-${from}`, from), { cwd });
    expect(run).toMatchObject({ code: 1, stdout: "" });
    expect(run.stderr.replace(/^(assumed|warning): .*\n/gm, "")).toMatch(
      /^hatchel: sci_01\.fits: .*light.*; .*trace.*\.\n$/,
    );
    expect(existsSync(join(cwd, `refused-${from}`))).toBe(false);
  });
});
