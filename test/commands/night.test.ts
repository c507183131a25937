/** A small night through the built command: plan, run, and run again after interruptions. What is right: the truth of the
 * scene, the products of an undisturbed run, and what `hatchel extract` makes of the same frame. */
import { spawn } from "node:child_process";
import { createHash } from "node:crypto";
import { copyFileSync, existsSync, mkdirSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { readSpectra } from "../../src/extraction/file.js";
import { fitsverify, judgeMissing } from "../judges.js";
import { writeNight } from "../night/frames.js";
import { hatchel } from "./spawned.js";

const BIN = fileURLToPath(new URL("../../bin/hatchel.js", import.meta.url));
let cwd: string;

beforeAll(async () => {
  cwd = await writeNight();
  good(["plan", "raw", "-o", "night.toml", "--quiet"]);
  withoutWavelengths("night.toml");
  good(["run", "night.toml", "-o", "whole", "--quiet", "--threads", "1"]);
});
afterAll(() => rmSync(cwd, { recursive: true }));

/** 200 columns of 5 Å hold too few arc lines to be named beyond doubt. */
function withoutWavelengths(plan: string): void {
  const text = readFileSync(join(cwd, plan), "utf8");
  writeFileSync(join(cwd, plan), text.replace(/^# wavelengths = true /m, "wavelengths = false "));
}

function good(args: string[]) {
  const run = hatchel(args, { cwd });
  if (run.code !== 0) throw new Error(`exit code ${run.code}: ${run.stderr}`);
  return run;
}

/** Sums of every file below a folder, records and all. */
function sums(folder: string): Record<string, string> {
  const names = (readdirSync(join(cwd, folder), { recursive: true, withFileTypes: true }) as import("node:fs").Dirent[])
    .filter((entry) => entry.isFile())
    .map((entry) => join(entry.parentPath ?? entry.path, entry.name))
    .sort();
  const sum = (path: string) => createHash("sha256").update(readFileSync(path)).digest("hex");
  return Object.fromEntries(names.map((path) => [path.slice(join(cwd, folder).length + 1), sum(path)]));
}

describe("plan", () => {
  test("says what it found, for people and as JSON", () => {
    const run = good(["plan", "raw", "-o", "again.toml"]);
    expect(run.stdout).toMatch(/^again\.toml: a plan for the frames in raw\n {2}bias +2 frames\n/);
    expect(run.stdout).toMatch(/^ {2}object +north field: 2 frames$/m);
    expect(run.stderr).toMatch(/^assumed: .*spectrograph\.toml is taken as the spectrograph file/m);
    const json = jsonSchemas.plan.parse(
      JSON.parse(good(["plan", "raw", "-o", "again.toml", "--force", "--json"]).stdout),
    );
    expect(json.frames.fibreFlat).toEqual(["fflat_01.fits", "fflat_02.fits"]);
    expect(json.objects.map(({ name }) => name)).toEqual(["north field", "south, crowded"]);
    expect(good(["plan", "raw", "-o", "-"]).stdout).toBe(readFileSync(join(cwd, "again.toml"), "utf8"));
  });

  test("does not write over a plan that somebody has worked on", () => {
    const run = hatchel(["plan", "raw", "-o", "night.toml"], { cwd });
    expect(run).toMatchObject({ code: 1, stdout: "" });
    expect(run.stderr).toMatch(/night\.toml: this file exists already; give another name, or --force/);
  });
});

describe("run", () => {
  test("keeps all that is there, and tells of it", () => {
    const before = sums("whole");
    const run = good(["run", "night.toml", "-o", "whole", "--json"]);
    const json = jsonSchemas.run.parse(JSON.parse(run.stdout));
    expect(json).toMatchObject({ made: 0, failed: 0 });
    expect(json.frames.map(({ frame, object, verdict }) => [frame, object, verdict])).toEqual([
      ["sci_01.fits", "north field", "good"],
      ["sci_02.fits", "north field", "good"],
      ["sci_03.fits", "south, crowded", "good"],
    ]);
    // The scene moves the second one by 0.06 px.
    const [one, two] = json.frames.map(({ shiftPixels }) => shiftPixels!);
    expect(two - one).toBeCloseTo(0.06, 1);
    expect(sums("whole")).toEqual(before);
    const text = good(["run", "night.toml", "-o", "whole"]).stdout;
    expect(text).toMatch(/^whole: raw: 3 of 3 object frames extracted, 0 products made, \d kept\n/);
    expect(text).toMatch(/^ {2}sci_02\.fits +north field +\d+\.\d +0\.0\d\d +\d+ +\d+\.\d % +good$/m);
  });

  test("gives what extract gives", async () => {
    const frames = { bias: ["bias_01", "bias_02"], dark: ["dark_01"], "pixel-flat": ["dflat_01", "dflat_02"] };
    const raw = (name: string) => `raw/${name}.fits`;
    const known = Object.entries(frames).flatMap(([role, names]) => [`--${role}`, ...names.map(raw)]);
    known.push("--spectrograph", "spectrograph.toml");
    good([
      "extract",
      raw("sci_02"),
      "--flat",
      raw("fflat_01"),
      raw("fflat_02"),
      ...known,
      "-o",
      "alone.fits",
      "--quiet",
    ]);
    const [a, b] = [
      await readSpectra(join(cwd, "alone.fits")),
      await readSpectra(join(cwd, "whole/sci_02.spectra.fits")),
    ];
    for (const key of ["flux", "variance", "flags"] as const) expect(b[key]).toEqual(a[key]);
  });

  test("gives the same files with any number of workers, from another folder, with the plan elsewhere", () => {
    good(["run", "night.toml", "-o", "pair", "--quiet", "--threads", "3"]);
    expect(sums("pair")).toEqual(sums("whole"));
    mkdirSync(join(cwd, "sub"));
    const plan = readFileSync(join(cwd, "night.toml"), "utf8").replace(/"(raw|spectrograph\.toml)"/g, '"../$1"');
    writeFileSync(join(cwd, "sub/night.toml"), plan.replace('name = "../raw"', 'name = "raw"'));
    expect(hatchel(["run", "night.toml", "-o", "out", "--quiet"], { cwd: join(cwd, "sub") })).toMatchObject({
      code: 0,
      stderr: "",
    });
    expect(sums("sub/out")).toEqual(sums("whole"));
  });

  test.skipIf(judgeMissing("fitsverify"))("writes files without a fault", () => {
    for (const name of readdirSync(join(cwd, "whole")).filter((one) => one.endsWith(".fits"))) {
      expect(fitsverify(join(cwd, "whole", name)), name).toEqual([]);
    }
  });

  test("names no path, time or process in what it leaves", () => {
    for (const name of Object.keys(sums("whole"))) {
      const text = readFileSync(join(cwd, "whole", name), "latin1");
      expect(text, name).not.toContain(cwd);
      expect(text, name).not.toMatch(/20[2-9]\d-\d\d-\d\dT(?!\d\d:\d\d:\d\d' ?)/);
    }
  });

  test("tells which frame failed, and finishes the others", async () => {
    const night = await writeNight();
    try {
      const path = join(night, "raw/sci_01.fits");
      writeFileSync(path, readFileSync(path).subarray(0, 20_000));
      const at = (args: string[]) => hatchel(args, { cwd: night });
      // Its header is whole, and the plan was made before.
      copyFileSync(join(cwd, "night.toml"), join(night, "night.toml"));
      const run = at(["run", "night.toml", "-o", "out"]);
      expect(run.code).toBe(1);
      expect(run.stdout).toMatch(/^out: raw: 2 of 3 object frames extracted/);
      expect(run.stdout).toMatch(
        /^failed: sci_01\.fits: .*sci_01\.fits: HDU 0: the file ends after \d+ of \d+ bytes of data/m,
      );
      expect(run.stderr).toMatch(/^hatchel: 2 products could not be made; the first is sci_01\.fits/m);
      // Of two frames one is left: nothing to combine it with.
      expect(run.stdout).toMatch(
        /^failed: north-field\.combined\.fits: it needs sci_01\.spectra\.fits, which could not/m,
      );
      const quiet = at(["run", "night.toml", "-o", "out", "--quiet"]);
      expect(quiet).toMatchObject({ code: 1, stdout: "" });
      const json = JSON.parse(at(["run", "night.toml", "-o", "out", "--json"]).stdout);
      expect(jsonSchemas.run.parse(json)).toMatchObject({ failed: 2, made: 0 });
      expect(json.frames[0]).toMatchObject({ verdict: "failed", product: null });
      const same = readFileSync(join(night, "out/sci_02.spectra.fits"));
      expect(same.equals(readFileSync(join(cwd, "whole/sci_02.spectra.fits")))).toBe(true);
      // A flat that is none: nothing can be extracted, and each frame says why.
      for (const name of ["fflat_01", "fflat_02"])
        copyFileSync(join(night, "raw/bias_01.fits"), join(night, `raw/${name}.fits`));
      const lost = at(["run", "night.toml", "-o", "out"]);
      expect(lost.code).toBe(1);
      expect(lost.stdout).toMatch(/^failed: tramlines\.fits: .*fflat_01\.fits was given as a fibre flat/m);
      expect(lost.stdout).toMatch(/^failed: sci_02\.fits: it needs tramlines\.fits, which could not be made \(/m);
    } finally {
      rmSync(night, { recursive: true });
    }
  });

  test.each([
    [["run", "no.toml", "-o", "out"], 1, /no\.toml: there is no such file, but a night plan/],
    [["run", "night.toml", "-o", "-"], 2, /-o is -, but a night has many products/],
    [["run", "night.toml"], 2, /-o, --output <file> is missing/],
    [["run", "spectrograph.toml", "-o", "out"], 1, /unknown key 'detector'|the plan names no fibre flat/],
    [["run", "night.toml", "-o", "night.toml"], 1, /night\.toml: this folder cannot be written to/],
  ])("refuses %j", (args, code, message) => {
    const run = hatchel(args, { cwd });
    expect(run.code).toBe(code);
    expect(run.stderr).toMatch(message);
    expect(run.stderr.trim().split("\n")).toHaveLength(1);
  });
});

describe("a run that is killed", () => {
  /** Starts a run and kills it after some milliseconds, or as soon as `when`. */
  async function killed(folder: string, signal: NodeJS.Signals, when: () => boolean): Promise<void> {
    const child = spawn(process.execPath, [BIN, "run", "night.toml", "-o", folder, "--threads", "2"], {
      cwd,
      stdio: "ignore",
    });
    const ended = new Promise((resolve) => child.on("exit", resolve));
    while (!when() && child.exitCode === null) await new Promise((resolve) => setTimeout(resolve, 2));
    child.kill(signal);
    await ended;
  }

  test("at any moment goes on to the same files, and leaves no half ones", async () => {
    const making = (folder: string) => join(cwd, folder, ".hatchel/making");
    const isMaking = (folder: string) => existsSync(making(folder)) && readdirSync(making(folder)).length > 0;
    const has = (folder: string, name: string) => existsSync(join(cwd, folder, name));
    const moments: [string, (folder: string) => boolean][] = [
      ["begun", (folder) => has(folder, ".hatchel/lock")],
      ["making", isMaking],
      ["tramlines", (folder) => has(folder, "tramlines.fits")],
      ["recorded", (folder) => has(folder, ".hatchel/records/tramlines.json")],
      ["one frame", (folder) => has(folder, "sci_01.spectra.fits") || has(folder, "sci_03.spectra.fits")],
    ];
    for (const [name, when] of moments) {
      const folder = `killed ${name}`;
      await killed(folder, "SIGKILL", () => when(folder));
      // What lies there is whole: nothing but what the undisturbed run has.
      for (const [file, sum] of Object.entries(sums(folder))) {
        if (!file.startsWith(".hatchel")) expect(sums("whole")[file], `${name}: ${file}`).toBe(sum);
      }
      good(["run", "night.toml", "-o", folder, "--quiet"]);
      expect(sums(folder), name).toEqual(sums("whole"));
    }
  });

  test("by an interrupt takes its half-made files with it", async () => {
    await killed("stopped", "SIGINT", () => existsSync(join(cwd, "stopped/.hatchel/making/1")));
    expect(readdirSync(join(cwd, "stopped/.hatchel"))).toEqual(["records"]);
    good(["run", "night.toml", "-o", "stopped", "--quiet"]);
    expect(sums("stopped")).toEqual(sums("whole"));
  });
});

test("--watch takes frames as they come, and ends cleanly when it is interrupted", async () => {
  mkdirSync(join(cwd, "live"));
  for (const name of readdirSync(join(cwd, "raw"))) {
    if (!name.startsWith("sci")) copyFileSync(join(cwd, "raw", name), join(cwd, "live", name));
  }
  good(["plan", "live", "-o", "live.toml", "--quiet"]);
  withoutWavelengths("live.toml");
  const child = spawn(process.execPath, [BIN, "run", "live.toml", "-o", "live-out", "--watch"], { cwd });
  let said = "";
  child.stdout.on("data", (text) => (said += text));
  child.stderr.on("data", (text) => (said += text));
  const ended = new Promise((resolve) => child.on("exit", (code, signal) => resolve(signal ?? code)));
  const until = async (what: RegExp) => {
    for (let i = 0; i < 1500 && !what.test(said); i++) await new Promise((resolve) => setTimeout(resolve, 20));
    expect(said).toMatch(what);
  };
  await until(/^tramlines\.fits: made$/m);
  for (const name of ["sci_02", "arc_01"])
    copyFileSync(join(cwd, `raw/${name}.fits`), join(cwd, `live/late_${name}.fits`));
  await until(/^late_sci_02\.spectra\.fits: made$/m);
  await until(/^late_arc_01\.fits: it is IMAGETYP 'arc', so it is left alone/m);
  child.kill("SIGINT");
  expect(await ended).toBe(0);
  expect(said).toMatch(/^live-out: live: 1 of 1 object frame extracted/m);
  const [a, b] = await Promise.all(
    ["whole/sci_02", "live-out/late_sci_02"].map((name) => readSpectra(join(cwd, `${name}.spectra.fits`))),
  );
  expect(b.flux).toEqual(a.flux);
  expect(readdirSync(join(cwd, "live-out/.hatchel"))).toEqual(["records"]);
});
