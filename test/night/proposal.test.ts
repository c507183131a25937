/** What is proposed from headers against what the simulated frames are, and what an observer must be told. */
import { execFileSync } from "node:child_process";
import { mkdirSync, readFileSync, renameSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import { afterAll, describe, expect, test } from "vitest";
import { readPlan } from "../../src/night/plan.js";
import { planText } from "../../src/night/planText.js";
import { type Proposal, proposePlan } from "../../src/night/proposal.js";
import { judgeMissing } from "../judges.js";
import { freshFolder, nightScene, writeFrame, writeNight } from "./frames.js";

const folders: string[] = [];
const keep = (folder: string) => folders[folders.push(folder) - 1];
afterAll(() => {
  for (const folder of folders) rmSync(folder, { recursive: true });
});

const ROLES = {
  bias: "bias",
  dark: "dark",
  "detector-flat": "pixelFlat",
  "fibre-flat": "fibreFlat",
  arc: "arc",
  twilight: "twilight",
} as const;

function expectTruth(proposal: Proposal, rename = (name: string) => `${name}.fits`): void {
  const { exposure } = nightScene();
  for (const [kind, role] of Object.entries(ROLES)) {
    const truth = exposure.filter((one) => one.kind === kind).map(({ name }) => rename(name));
    expect(proposal.frames[role].map(({ name }) => name).sort(), kind).toEqual(truth.sort());
  }
  const fields = new Map<string, string[]>();
  for (const { name, kind, object } of exposure) {
    if (kind === "science") fields.set(object!, [...(fields.get(object!) ?? []), rename(name)]);
  }
  const proposed = proposal.objects.map(({ name, frames }) => [name, frames.map((frame) => frame.name)]);
  expect(proposed.sort()).toEqual([...fields].sort());
  expect(proposal.left).toEqual([]);
}

describe("a simulated night", () => {
  test("is proposed as it was exposed, with the spectrograph file beside it", async () => {
    const night = keep(await writeNight());
    const proposal = await proposePlan(join(night, "raw"));
    expectTruth(proposal);
    expect(proposal.spectrograph).toBe(join(night, "spectrograph.toml"));
    expect(proposal.assumptions.join("\n")).toMatch(/spectrograph\.toml is taken as the spectrograph file/);
    // The spectrograph file names its bad pixels itself.
    expect(proposal.badPixels).toBeUndefined();
    // The scene has one sky fibre.
    expect(proposal.warnings).toEqual([
      "spectrograph.toml: 'slit.sky' names fewer than two fibres, so no sky can be taken off.",
    ]);
  });

  test("is the same from its text, wherever the plan lies", async () => {
    const night = keep(await writeNight());
    const proposal = await proposePlan(join(night, "raw"));
    mkdirSync(join(night, "plans"));
    for (const home of [night, join(night, "plans"), join(night, "raw")]) {
      writeFileSync(join(home, "night.toml"), planText(proposal, home));
      const plan = await readPlan(join(home, "night.toml"));
      const paths = (list: { path: string }[]) => list.map(({ path }) => path);
      for (const role of Object.values(ROLES)) expect(plan.frames[role]).toEqual(paths(proposal.frames[role]));
      expect(plan.objects.map(({ name, frames }) => ({ name, frames }))).toEqual(
        proposal.objects.map(({ name, frames }) => ({ name, frames: paths(frames) })),
      );
      expect(plan.wanted).toMatchObject({ wavelengths: true, throughput: "twilight", rebin: "off" });
      expect(plan.spectrograph).toBe(proposal.spectrograph);
    }
  });

  test("is read packed with gzip, by the start of each file alone", async () => {
    const night = keep(await writeNight());
    for (const { name } of nightScene().exposure) {
      const path = join(night, "raw", `${name}.fits`);
      // Cut behind the header: whoever reads further meets the end.
      const packed = gzipSync(readFileSync(path));
      writeFileSync(`${path}.gz`, packed.subarray(0, Math.floor(packed.length / 2)));
      rmSync(path);
    }
    expectTruth(await proposePlan(join(night, "raw")), (name) => `${name}.fits.gz`);
  });

  test.skipIf(judgeMissing("fpack"))("is read packed in tiles", async () => {
    const night = keep(await writeNight());
    for (const { name } of nightScene().exposure) {
      const path = join(night, "raw", `${name}.fits`);
      execFileSync("fpack", [path]);
      rmSync(path);
    }
    expectTruth(await proposePlan(join(night, "raw")), (name) => `${name}.fits.fz`);
  });
});

describe("tells", () => {
  const told = async (frames: Record<string, [cards: object, nx?: number]>) => {
    const folder = keep(freshFolder());
    for (const [name, [cards, nx]] of Object.entries(frames)) {
      await writeFrame(join(folder, name), { EXPTIME: 10, DISPAXIS: 1, SATURATE: 65535, ...cards }, nx);
    }
    return proposePlan(folder);
  };
  const flat = { IMAGETYP: "fibre flat" };

  test("what is missing", async () => {
    const { warnings } = await told({ "a.fits": [flat], "b.fits": [{ IMAGETYP: "bias" }] });
    const said = warnings.join("\n");
    for (const what of [
      /^No object frame/m,
      /^Only one bias frame, b\.fits/m,
      /^No dark frame/m,
      /^No pixel flat/m,
      /^Only one fibre flat, a\.fits/m,
      /^No arc: .*no wavelengths/m,
      /^No twilight/m,
      /^No spectrograph file/m,
    ]) {
      expect(said).toMatch(what);
    }
    expect(said).not.toMatch(/No fibre flat|No bias/);
  });

  test("frames that do not say what they are", async () => {
    const { left, warnings } = await told({
      "a.fits": [flat],
      "odd.fits": [{ IMAGETYP: "focus run" }],
      "lamp.fits": [{ IMAGETYP: "flat" }],
    });
    expect(left.map(({ name }) => name)).toEqual(["lamp.fits", "odd.fits"]);
    expect(warnings.join("\n")).toMatch(/^odd\.fits: neither IMAGETYP nor OBJECT says/m);
    expect(warnings.join("\n")).toMatch(/^lamp\.fits: the header calls it a flat, but not whether/m);
  });

  test("object frames without a name, and those that point elsewhere under one name", async () => {
    const at = (RA: string) => ({ IMAGETYP: "object", OBJECT: "m1", RA, DEC: "+10:00:00" });
    const { objects, warnings } = await told({
      "a.fits": [flat],
      "s1.fits": [at("01:00:00")],
      "s2.fits": [at("01:00:00")],
      "s3.fits": [at("02:00:00")],
      "nameless.fits": [{ IMAGETYP: "object" }],
    });
    expect(objects.map(({ name, frames }) => [name, frames.length])).toEqual([
      ["nameless", 1],
      ["m1", 3],
    ]);
    const said = warnings.join("\n");
    expect(said).toMatch(/^nameless\.fits: it has no OBJECT, so it stands alone/m);
    expect(said).toMatch(/^s3\.fits: OBJECT is 'm1' as in s1\.fits, but it points to 02:00:00 \+10:00:00/m);
    expect(said).not.toMatch(/^s2\.fits/m);
  });

  test("two readouts, and takes the one with more object frames", async () => {
    const object = { IMAGETYP: "object", OBJECT: "m1" };
    const { frames, objects, left, warnings } = await told({
      "a.fits": [flat, 8],
      "b.fits": [flat, 8],
      "c.fits": [flat, 8],
      "d.fits": [flat, 12],
      "s.fits": [object, 12],
    });
    expect(frames.fibreFlat.map(({ name }) => name)).toEqual(["d.fits"]);
    expect(objects).toHaveLength(1);
    expect(left).toHaveLength(3);
    expect(warnings[0]).toMatch(
      /^a\.fits, b\.fits, c\.fits: of another readout than d\.fits \(size 8 × 6 pixels against 12 × 6 pixels/,
    );
  });

  test("files that cannot be read, and goes on", async () => {
    const folder = keep(freshFolder());
    await writeFrame(join(folder, "a.fits"), flat);
    writeFileSync(join(folder, "torn.fits"), readFileSync(join(folder, "a.fits")).subarray(0, 3000));
    writeFileSync(join(folder, ".hidden.fits"), "nothing");
    const { left, warnings } = await proposePlan(folder);
    expect(left).toEqual([{ name: "torn.fits", why: "cannot be read" }]);
    expect(warnings[0]).toMatch(/torn\.fits: HDU 0: the file ends after 120 of 192 bytes of data; fetch it again\.$/);
  });

  test("two spectrograph files, and takes neither", async () => {
    const folder = keep(freshFolder());
    await writeFrame(join(folder, "a.fits"), flat);
    writeFileSync(join(folder, "blue.toml"), 'name = "blue"\n');
    writeFileSync(join(folder, "red.toml"), 'name = "red"\n');
    const { spectrograph, warnings } = await proposePlan(folder);
    expect(spectrograph).toBeUndefined();
    expect(warnings.join("\n")).toMatch(/blue\.toml, red\.toml all read as spectrograph files/);
  });
});

test("arcs whose lines cannot be named are listed, and no wavelengths proposed", async () => {
  const folder = keep(freshFolder());
  await writeFrame(join(folder, "arc.fits"), { IMAGETYP: "arc" });
  await writeFrame(join(folder, "flat.fits"), { IMAGETYP: "fibre flat" });
  writeFileSync(join(folder, "bench.toml"), '[wavelength]\nlamps = ["Ne"]\n');
  const proposal = await proposePlan(folder);
  expect(proposal.warnings.join("\n")).toMatch(/^bench\.toml: without 'wavelength\.range' and/m);
  writeFileSync(join(folder, "night.toml"), planText(proposal, folder));
  expect((await readPlan(join(folder, "night.toml"))).wanted.wavelengths).toBe(false);
});

test("frames stand in the order in which they were exposed", async () => {
  const folder = keep(freshFolder());
  const at = (hour: number) => ({ IMAGETYP: "arc", "DATE-OBS": `2031-03-04T0${hour}:00:00` });
  await writeFrame(join(folder, "a.fits"), at(3));
  await writeFrame(join(folder, "b.fits"), at(1));
  await writeFrame(join(folder, "c.fits"), at(2));
  expect((await proposePlan(folder)).frames.arc.map(({ name }) => name)).toEqual(["b.fits", "c.fits", "a.fits"]);
});

test("a folder without frames is refused", async () => {
  const folder = keep(freshFolder());
  await expect(proposePlan(folder)).rejects.toThrow(/there is no FITS frame in this folder; name the folder/);
  await expect(proposePlan(join(folder, "no"))).rejects.toThrow(/there is no such folder/);
  writeFileSync(join(folder, "file"), "");
  renameSync(join(folder, "file"), join(folder, "file2"));
  await expect(proposePlan(join(folder, "file2"))).rejects.toThrow(/this is no folder/);
});
