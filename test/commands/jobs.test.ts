/** The command's jobs end to end on a small night, with what they print and write. */
import { spawn, spawnSync } from "node:child_process";
import { existsSync, mkdirSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { readPositions, readSpectra } from "../../src/extraction/file.js";
import { readImage } from "../../src/fits/image.js";
import { median } from "../../src/reference/median.js";
import { scoreByDecade } from "../../src/report/truth.js";
import { readTramlines } from "../../src/tramlines/file.js";
import { fitsverify, judgeMissing } from "../judges.js";
import { hatchel, lines, SMALL_SCENE, smallNight } from "./spawned.js";

let cwd: string;
const RAW = "night/raw";
const FRAME = `${RAW}/sci_01.fits`;
const FLATS = [`${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`];
const BIAS = ["--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];
const KNOWN = ["--spectrograph", "night/spectrograph.toml", ...BIAS];
const LIT = Array.from({ length: 19 }, (_, k) => k !== 8);

beforeAll(() => {
  cwd = smallNight();
  good(["trace", ...FLATS, "-o", "tramlines.fits", ...KNOWN, "--quiet"]);
  good(["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "spectra.fits", ...KNOWN, "--quiet"]);
});
afterAll(() => rmSync(cwd, { recursive: true }));

function good(args: string[], input?: Buffer) {
  const run = hatchel(args, { cwd, ...(input ? { input } : {}) });
  if (run.code !== 0) throw new Error(`exit code ${run.code}: ${run.stderr}`);
  return run;
}

function bytes(path: string): Buffer {
  return readFileSync(join(cwd, path));
}

describe("simulate", () => {
  test("lists what it wrote", () => {
    const run = good(["simulate", "scene.toml", "-o", "again", "--force", "--json"]);
    const json = jsonSchemas.simulate.parse(JSON.parse(run.stdout));
    expect(json).toMatchObject({
      command: "simulate",
      scene: "small bench",
      folder: "again",
      badPixels: "badmask.fits",
    });
    expect(json.exposures[5]).toEqual({
      ...{ name: "sci_01", kind: "science" },
      ...{ raw: "raw/sci_01.fits", truth: "truth/sci_01.fits" },
    });
    expect(bytes("again/raw/sci_01.fits").equals(bytes(FRAME))).toBe(true);
  });

  test("prints a table of the frames", () => {
    const { stdout } = good(["simulate", "scene.toml", "-o", "again", "--force"]);
    expect(stdout).toMatch(/^small bench: 6 frames in again\n/);
    expect(stdout).toMatch(/^ {2}raw\/sci_01\.fits +science +900 s +truth\/sci_01\.fits$/m);
  });

  test("leaves whole frames only when it is interrupted", async () => {
    const large = SMALL_SCENE.replace("[200, 150]", "[1400, 900]");
    writeFileSync(join(cwd, "large.toml"), large);
    const bin = new URL("../../bin/hatchel.js", import.meta.url).pathname;
    const child = spawn(process.execPath, [bin, "simulate", "large.toml", "-o", "large"], { cwd, stdio: "ignore" });
    const ended = new Promise((resolve) => child.on("exit", (_code, signal) => resolve(signal)));
    while (!existsSync(join(cwd, "large/raw/bias_01.fits"))) await new Promise((resolve) => setTimeout(resolve, 10));
    child.kill("SIGINT");
    expect(await ended).toBe("SIGINT");
    const files = (readdirSync(join(cwd, "large"), { recursive: true }) as string[]).filter((name) => /\./.test(name));
    expect(files.filter((name) => !/\.(fits|toml)$/.test(name))).toEqual([]);
    expect(files).not.toContain("raw/sci_01.fits");
    for (const name of files.filter((one) => one.endsWith(".fits"))) {
      expect((await readImage(join(cwd, "large", name))).checksumState, name).toBe("right");
    }
  });
});

describe("look", () => {
  test("measures gain and read noise from pairs, to be held against the header's", () => {
    const run = good(["look", FRAME, ...BIAS, "--flat", ...FLATS, "--json"]);
    const json = jsonSchemas.look.parse(JSON.parse(run.stdout));
    expect(json).toMatchObject({ frame: "sci_01.fits", size: [220, 150], kind: "science", exposureSeconds: 900 });
    const [amplifier] = json.amplifiers;
    expect(amplifier).toMatchObject({ data: "[21:220,1:150]", givenGain: 1.3, givenReadNoise: 3.1 });
    expect(amplifier.readNoiseFrom).toBe("bias pairs");
    // Within four of its own standard errors of what was put in; the converter's steps add 1.3²/12 to 3.1².
    const { gain, readNoise } = amplifier;
    expect(Math.abs(gain!.value - 1.3)).toBeLessThan(4 * gain!.error!);
    expect(gain!.error).toBeLessThan(0.1);
    expect(Math.abs(readNoise!.value - Math.sqrt(3.1 ** 2 + 1.3 ** 2 / 12))).toBeLessThan(4 * readNoise!.error!);
  });

  test("prints the same for people, also from standard input", () => {
    const { stdout } = good(["look", FRAME]);
    expect(stdout).toMatch(/^sci_01\.fits\n {2}image +220 × 150 pixels, BITPIX 16\n/);
    expect(stdout).toMatch(/^ {2}kind +science \(IMAGETYP '\w+'\)$/m);
    expect(stdout).toMatch(/^ {2}1 +\[21:220,1:150\] +1\.300 +– +3\.10 +3\.\d+ ± 0\.\d+ +overscan$/m);
    const piped = good(["look", "-"], bytes(FRAME)).stdout;
    expect(piped.split("\n").slice(1)).toEqual(stdout.split("\n").slice(1));
  });
});

describe("trace", () => {
  test("names the fibres by the slit and tells how sure it is", async () => {
    const run = good(["trace", ...FLATS, "-o", "tramlines.fits", ...KNOWN, "--force", "--json"]);
    const json = jsonSchemas.trace.parse(JSON.parse(run.stdout));
    expect(json.fibres).toEqual({
      ...{ positions: 19, blocks: 3, lit: 18, dim: 0, dead: 1 },
      ...{ dimPositions: [], deadPositions: [9] },
    });
    expect(json.naming.score - json.naming.runnerUpScore!).toBeGreaterThan(8);
    // Common practice: 0.02 px is a good trace.
    expect(json.rmsPixels).toBeLessThan(0.02);
    const tramlines = await readTramlines(join(cwd, "tramlines.fits"));
    expect(tramlines.state).toEqual(LIT.map((lit) => (lit ? "lit" : "dead")));
    const widths = Array.from(
      { length: 19 },
      (_, k) => tramlines.profile.sigma[k * (tramlines.profile.widthDegree + 1)],
    );
    // The scene's FWHM, 2.6 px, over 2√(2 ln 2).
    expect(median(widths)).toBeCloseTo(2.6 / 2.3548, 1);
  });

  test("says for people what it found", () => {
    const { stdout } = good(["trace", ...FLATS, "-o", "tramlines.fits", ...KNOWN, "--force"]);
    expect(stdout).toMatch(/^tramlines\.fits: tramlines\n {2}fibres +19 positions in 3 blocks: 18 lit, 1 dead \(9\)\n/);
    expect(stdout).toMatch(/^ {2}naming +all positions as named: score \S+; next best reading, .*: score -\d/m);
    expect(stdout).toMatch(/^ {2}trace +rms 0\.0\d+ px \(good\), worst 0\.\d+ px in fibre \d+, degree \d$/m);
  });
});

describe("extract", () => {
  test("works with a flat alone and says what it assumed", async () => {
    const run = good(["extract", FRAME, "--flat", FLATS[0], "-o", "plain.fits", "--json"]);
    const json = jsonSchemas.extract.parse(JSON.parse(run.stdout));
    // Without a layout the dead fibre has no number.
    expect(json.fibres).toMatchObject({ positions: 18, lit: 18, dead: 0 });
    expect(json.assumptions.join("\n")).toMatch(/no bias frames/);
    expect(json.assumptions.join("\n")).toMatch(
      /no slit layout was given, so the 18 fibres found are numbered from low y/,
    );
    const said = lines(run.stderr);
    expect(said.filter((line) => line.startsWith("assumed: "))).toEqual(
      json.assumptions.map((one) => `assumed: ${one}`),
    );
    expect(said.filter((line) => line.startsWith("warning: "))).toEqual(json.warnings.map((one) => `warning: ${one}`));
    expect((await readSpectra(join(cwd, "plain.fits"))).nFibre).toBe(18);
  });

  test("gives the light that the simulation put in, with error bars that hold", async () => {
    const before = bytes("spectra.fits");
    const args = ["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "spectra.fits", ...KNOWN];
    const run = good([...args, "--force", "--json"]);
    expect(bytes("spectra.fits").equals(before)).toBe(true);
    const json = jsonSchemas.extract.parse(JSON.parse(run.stdout));
    expect(json).toMatchObject({ method: "joint", precision: "f32", tracing: null, columns: 200, points: 3600 });
    const spectra = await readSpectra(join(cwd, "spectra.fits"));
    const flux = (await readImage(join(cwd, "night/truth/sci_01.fits"), { hdu: "FLUX" })).data;
    const scores = scoreByDecade(spectra, { flux, lit: LIT });
    const strong = scores.find(({ from }) => from === 1e3)!;
    expect(strong.nPoint).toBeGreaterThan(500);
    expect(strong.usableShare).toBeGreaterThan(0.97);
    expect(Math.abs(strong.bias!)).toBeLessThan(0.01);
    // Scatter of a robust standard deviation of n points: 1.17/√n, 5 % here; a fitted width and trace add to it.
    expect(Math.abs(strong.pull! - 1)).toBeLessThan(0.25);
    expect(Array.from(spectra.flux.subarray(8 * 200, 9 * 200)).every(Number.isNaN)).toBe(true);
    expect(json.signalToNoise.faintest).toBeLessThan(json.signalToNoise.median!);
    expect(json.spectra[8]).toMatchObject({ fibre: 9, state: "dead", usableShare: 0, medianSignalToNoise: null });
    expect(json.rejectedPixels).toBeGreaterThan(0);
    // The scene moves nothing between flat and science frame.
    expect(Math.abs(json.shift!.pixels)).toBeLessThan(0.02);
    expect((await readPositions(join(cwd, "spectra.fits"))).role[2]).toBe("sky");
  });

  test("takes a flat or its tramlines to the same spectra", async () => {
    good(["extract", FRAME, "--flat", ...FLATS, "-o", "by-flat.fits", ...KNOWN, "--force", "--quiet"]);
    const [a, b] = [await readSpectra(join(cwd, "by-flat.fits")), await readSpectra(join(cwd, "spectra.fits"))];
    expect(a.flux).toEqual(b.flux);
    expect(a.variance).toEqual(b.variance);
  });

  test("prints fibres, naming, rejected pixels, flags and signal to noise", () => {
    const { stdout } = good(["extract", FRAME, "--flat", ...FLATS, "-o", "by-flat.fits", ...KNOWN, "--force"]);
    expect(stdout).toMatch(/^by-flat\.fits: spectra of sci_01\.fits\n {2}fibres +19 positions in 3 blocks/);
    for (const fact of [
      "naming",
      "trace",
      "profile",
      "method",
      "cosmic rays",
      "usable points",
      "flags",
      "median S/N",
    ]) {
      expect(stdout).toMatch(new RegExp(`^  ${fact} +\\S`, "m"));
    }
    expect(stdout).toMatch(/^ {2}cosmic rays +\d+ pixels? rejected$/m);
  });

  test("obeys its options", async () => {
    const withOptions = async (...options: string[]) => {
      const args = ["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "o.fits", "--force", "--json", "--quiet"];
      const json = jsonSchemas.extract.parse(JSON.parse(good([...args, ...KNOWN, ...options]).stdout));
      return { json, spectra: await readSpectra(join(cwd, "o.fits")) };
    };
    const sum = ({ flux }: { flux: ArrayLike<number> }) => Array.from(flux).reduce((all, f) => all + (f || 0), 0);
    const wide = await withOptions("--method", "boxcar", "--crosstalk", "off");
    expect(wide.json).toMatchObject({ method: "boxcar", crosstalkCorrected: false });
    const narrow = await withOptions("--method", "boxcar", "--crosstalk", "off", "--half-aperture", "1.2");
    // Each method's flux is all of the fibre's light. What differs uncorrected is the neighbours' share: in ±3 px of a
    // Gaussian of σ 1.10 px it is erfc(3.1/(1.10·√2))/2 = 0.24 % from each side at a pitch of 6.1 px, in ±1.2 px nothing.
    const share = sum(narrow.spectra) / sum(wide.spectra);
    expect(share).toBeGreaterThan(0.99);
    expect(share).toBeLessThan(0.998);
    const pinhole = await withOptions("--method", "boxcar", "--half-aperture", "0.01");
    expect(pinhole.json.usablePoints).toBe(0);
    expect(pinhole.json.warnings).toContain(
      "sci_01.fits: only 0.0 % of the spectrum points can be trusted; their flags tell why.",
    );
    const uncleaned = await withOptions("--cosmic-rays", "off");
    expect(uncleaned.json).toMatchObject({ cosmicRays: false, rejectedPixels: 0 });
    expect(sum(uncleaned.spectra)).toBeGreaterThan(sum(await readSpectra(join(cwd, "spectra.fits"))) + 500);
    const unrefined = await withOptions("--refine", "off");
    expect(unrefined.json.refinedProfile).toBe(false);
    expect(bytes("o.fits").toString("latin1")).toMatch(/HISTORY .*refine off/);
    expect(bytes("spectra.fits").toString("latin1")).toMatch(/HISTORY .*refine on/);
    const double = (await withOptions("--precision", "f64")).spectra;
    const single = { spectra: await readSpectra(join(cwd, "spectra.fits")) };
    expect(single.spectra.flux).not.toEqual(double.flux);
    expect(sum(single.spectra) / sum(double) - 1).toBeCloseTo(0, 4);
  });

  test("writes the same bytes to a file, to a pipe, and from another folder", () => {
    const args = ["extract", FRAME, "--tramlines", "tramlines.fits", ...KNOWN];
    const piped = good([...args, "-o", "-"]);
    expect(piped.bytes.equals(bytes("spectra.fits"))).toBe(true);
    expect(piped.stderr).toMatch(/^standard output: spectra of sci_01\.fits$/m);
    mkdirSync(join(cwd, "sub"), { recursive: true });
    const up = args.map((arg) => (/^(night|tramlines)/.test(arg) ? `../${arg}` : arg));
    const away = hatchel([...up, "-o", "s.fits", "--quiet"], { cwd: join(cwd, "sub") });
    expect(away).toMatchObject({ code: 0, stdout: "", stderr: "" });
    expect(bytes("sub/s.fits").equals(bytes("spectra.fits"))).toBe(true);
  });

  test("keeps HISTORY: version, options, inputs with checksums, and no path", async () => {
    const { primaryHeader } = await readImage(join(cwd, "spectra.fits"), { hdu: "FLUX" });
    const history = primaryHeader.cards.filter(({ keyword }) => keyword === "HISTORY").map(({ comment }) => comment);
    expect(history.slice(0, 4)).toEqual([
      expect.stringMatching(/^made by hatchel \d/),
      "option method joint",
      "option precision f32",
      "option cosmic-rays on",
    ]);
    expect(
      history.filter((line) => /^input (sci_01|tramlines|bias_0[12])\.fits checksum [0-9a-f]{16}$/.test(line)),
    ).toHaveLength(4);
    expect(history.join("\n")).not.toContain("/");
  });

  test("takes frame or tramlines from a pipe to the same spectra", async () => {
    const tramlines = ["--tramlines", "tramlines.fits"];
    const byFrame = good(["extract", "-", ...tramlines, ...KNOWN, "-o", "-", "--quiet"], bytes(FRAME));
    writeFileSync(join(cwd, "by-frame.fits"), byFrame.bytes);
    const byLines = good(["extract", FRAME, "--tramlines", "-", ...KNOWN, "-o", "-"], bytes("tramlines.fits"));
    writeFileSync(join(cwd, "by-lines.fits"), byLines.bytes);
    const { flux } = await readSpectra(join(cwd, "spectra.fits"));
    expect((await readSpectra(join(cwd, "by-frame.fits"))).flux).toEqual(flux);
    expect((await readSpectra(join(cwd, "by-lines.fits"))).flux).toEqual(flux);
  });

  test("is silent when its reader goes away", () => {
    const bin = new URL("../../bin/hatchel.js", import.meta.url).pathname;
    const command = `"${process.execPath}" "${bin}" extract ${FRAME} --tramlines tramlines.fits -o - --quiet | sh -c 'exec 0<&-; sleep 2'`;
    const run = spawnSync("sh", ["-c", command], { cwd, encoding: "utf8" });
    expect(run).toMatchObject({ stdout: "", stderr: "" });
  });

  test.skipIf(judgeMissing("fitsverify"))("writes files without a fault", () => {
    for (const product of ["tramlines.fits", "spectra.fits"]) expect(fitsverify(join(cwd, product))).toEqual([]);
  });
});

describe("compare", () => {
  const ARGS = ["compare", FRAME, "--tramlines", "tramlines.fits", ...KNOWN];

  test("gives the methods' figures, in a file the same ones twice", () => {
    const run = good([...ARGS, "-o", "one.json", "--json"]);
    const json = jsonSchemas.compare.parse(JSON.parse(run.stdout));
    expect(json.methods.map(({ method, crosstalkCorrected }) => `${method} ${crosstalkCorrected}`)).toEqual([
      ...["joint true", "optimal true", "optimal false", "boxcar true", "boxcar false"],
    ]);
    const [joint, , , boxcar] = json.methods;
    // Horne (1986): weighting never loses; on read noise it gains most.
    expect(joint.equivalentExposureFaint).toBeGreaterThan(1);
    expect(boxcar.equivalentExposure).toBeCloseTo(1, 12);
    good([...ARGS, "-o", "two.json", "--quiet"]);
    expect(bytes("two.json").equals(bytes("one.json"))).toBe(true);
    const file = jsonSchemas.compare.parse(JSON.parse(bytes("one.json").toString()));
    expect(file.methods.map(({ seconds }) => seconds)).toEqual([undefined, undefined, undefined, undefined, undefined]);
    expect({ ...file, methods: [] }).toEqual({ ...json, methods: [] });
  });

  test("prints them with cautions", () => {
    const { stdout } = good(ARGS);
    expect(stdout).toMatch(/^ {2}boxcar, uncorrected +\d/m);
    expect(stdout).toMatch(/^Caution: S\/N and worth in exposure rest on each method's own error bars/m);
  });
});

describe("verify", () => {
  test("finds kernels and reference in agreement", () => {
    const args = ["verify", FRAME, "--tramlines", "tramlines.fits", ...KNOWN];
    const json = jsonSchemas.verify.parse(JSON.parse(good([...args, "--json"]).stdout));
    expect(json.passed).toBe(true);
    expect(json.checks).toHaveLength(10);
    for (const check of json.checks) expect(check.nPoint).toBeGreaterThan(3000);
    expect(good(args).stdout).toMatch(/Kernels and reference agree within their bounds\.\n$/);
  });
});

describe("--quiet", () => {
  test.each([
    ["simulate", "scene.toml", "-o", "quiet"],
    ["look", FRAME],
    ["trace", FLATS[0], "-o", "quiet.fits"],
    ["extract", FRAME, "--flat", FLATS[0], "-o", "quiet-spectra.fits"],
    ["compare", FRAME, "--flat", FLATS[0]],
    ["verify", FRAME, "--flat", FLATS[0]],
  ])("%s is silent", (...args) => {
    expect(hatchel([...args, "--quiet"], { cwd })).toMatchObject({ code: 0, stdout: "", stderr: "" });
  });
});
