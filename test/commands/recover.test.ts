/** hatchel recover end to end on a small night. */
import { copyFileSync, readFileSync, rmSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { hatchel, lines, smallNight } from "./spawned.js";

let cwd: string;
const RAW = "night/raw";
const FRAME = `${RAW}/sci_01.fits`;
const [FIRST, SECOND] = [`${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`];
const KNOWN = ["--spectrograph", "night/spectrograph.toml", "--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];

beforeAll(() => {
  cwd = smallNight();
});
afterAll(() => rmSync(cwd, { recursive: true }));

const recover = (...args: string[]) => hatchel(["recover", FRAME, ...args, ...KNOWN], { cwd });

test("holds the last flat back, tells so, and passes pure Gaussians", () => {
  const run = recover("--flat", FIRST, SECOND, "--json", "-o", "recover.json");
  expect(run.code, run.stderr).toBe(0);
  const json = jsonSchemas.recover.parse(JSON.parse(run.stdout));
  expect(json).toMatchObject({ frame: "sci_01.fits", injectedFrom: ["fflat_02.fits"], method: "joint", seed: 1 });
  expect(json.verdict.grade).not.toBe("bad");
  expect(json.assumptions.join()).toMatch(/(^|,)fflat_02\.fits is injected and not traced; profiles made with it too/);
  expect(json.cells.map(({ from }) => from)).toEqual(expect.arrayContaining([10, 100, 1000]));
  // Two gaps and the dead fibre, 9.
  expect(json.dark[0].nPosition).toBeGreaterThanOrEqual(3);
  expect(readFileSync(join(cwd, "recover.json"), "utf8")).toBe(run.stdout);
});

test("prints levels, dark positions and a verdict; the same once more", () => {
  const args = ["--flat", FIRST, "--inject", SECOND, "--profile", "gaussian", "--quiet", "-o", "-"];
  const [one, two] = [recover(...args), recover(...args)];
  expect(one.code, one.stderr).toBe(0);
  expect(two.stdout).toBe(one.stdout);
  const page = recover("--flat", FIRST, "--inject", SECOND, "--profile", "gaussian").stdout;
  expect(page).toMatch(/^sci_01\.fits: light of fflat_02\.fits \(\d+ e⁻ per column, pixels where they are\) injected/);
  expect(page).toMatch(/^ {2}100-1000 +far +\d+ +-?\d\.\d+ % /m);
  expect(page).toMatch(/^ {2}injected +beside a fibre +\d+ positions /m);
  expect(lines(page).at(-1)).toMatch(
    /^The extraction (can be trusted on this frame|of this frame is to be used with care)/,
  );
});

test("refuses light of the flat that made the profiles, by whatever name", () => {
  copyFileSync(join(cwd, FIRST), join(cwd, "again.fits"));
  const sentence = /^hatchel: again\.fits: the profiles were made from this very flat, .* inject another exposure\.$/m;
  const traced = recover("--flat", FIRST, "--inject", "again.fits");
  expect(traced.stderr).toMatch(sentence);
  expect(traced.code).toBe(1);
  expect(hatchel(["trace", FIRST, "-o", "first.fits", ...KNOWN], { cwd }).code).toBe(0);
  const written = recover("--tramlines", "first.fits", "--inject", "again.fits");
  expect(written.stderr).toMatch(sentence);
  expect(written.code).toBe(1);
});

test("asks for a second flat, and for a whole seed", () => {
  const one = recover("--flat", FIRST);
  expect(lines(one.stderr)).toEqual([
    "hatchel recover: no flat is left to take light from; give a second exposure with --inject, since light of the flat that the profiles were made from would always come back.",
  ]);
  expect(one.code).toBe(2);
  const seed = recover("--flat", FIRST, SECOND, "--seed", "1.5");
  expect(seed.stderr).toMatch(/--seed.*1\.5.*whole number/);
  expect(seed.code).toBe(2);
});
