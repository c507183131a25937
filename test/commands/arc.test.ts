/** hatchel arc on simulated frames, as an observer calls it. */
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, expect, test } from "vitest";
import { readWavelengths } from "../../src/calibration/wavelengthFile.js";
import { jsonSchemas } from "../../src/commands/json.js";
import { ARC_SCENE } from "../calibration/arcScene.js";
import { hatchel } from "./spawned.js";

let folder: string;
const arc = ["arc", "raw/arc_01.fits", "raw/arc_02.fits", "--tramlines", "t.fits"];
const run = (...args: string[]) => hatchel(args, { cwd: join(folder, "night") });

beforeAll(() => {
  folder = mkdtempSync(join(tmpdir(), "hatchel-arc-"));
  const flat = '[[exposure]]\nname = "fflat_01"\nkind = "fibre-flat"\nseconds = 12\n';
  writeFileSync(join(folder, "scene.toml"), ARC_SCENE + flat);
  hatchel(["simulate", "scene.toml", "-o", "night", "--quiet"], { cwd: folder });
  const traced = run("trace", "raw/fflat_01.fits", "--spectrograph", "spectrograph.toml", "-o", "t.fits", "--quiet");
  if (traced.code !== 0) throw new Error(traced.stderr);
}, 120_000);
afterAll(() => rmSync(folder, { recursive: true, force: true }));

test("writes wavelengths and says how good they are", async () => {
  const ended = run(...arc, "--spectrograph", "spectrograph.toml", "-o", "w.fits", "--json");
  expect(ended.stderr).not.toContain("warning");
  expect(ended.code).toBe(0);
  const json = jsonSchemas.arc.parse(JSON.parse(ended.stdout));
  expect(json.rmsPixels).toBeLessThan(0.03);
  expect(json.exposures[1].offsetPixels).toBeCloseTo(-0.04, 2);
  expect(json.fibres[5].state).toBe("none");
  const solution = await readWavelengths(join(folder, "night/w.fits"));
  expect([solution.nFibre, solution.nx, solution.medium]).toEqual([22, 820, "air"]);
}, 60_000);

test("asks for range and lamps when nothing tells them", () => {
  const bare = run(...arc, "-o", "x.fits");
  expect(bare.stderr).toContain("nothing tells which wavelengths to expect; give --range");
  const lampless = run(...arc, "-o", "x.fits", "--range", "5800", "7400");
  expect(lampless.stderr).toContain("nothing tells which lamps were on");
  const odd = run(...arc, "-o", "x.fits", "--range", "5800");
  expect([odd.code, odd.stderr]).toEqual([2, expect.stringContaining("--range is '5800'")]);
}, 60_000);
