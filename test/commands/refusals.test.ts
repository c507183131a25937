/** Jobs that cannot be done: one sentence, exit code 1, nothing written, nothing harmed. */
import { createHash } from "node:crypto";
import { mkdirSync, readdirSync, readFileSync, rmSync, symlinkSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { failureOf } from "../../src/commands/failures.js";
import { jsonSchemas } from "../../src/commands/json.js";
import { hatchel, smallNight } from "./spawned.js";

let cwd: string;
const FRAME = "night/raw/sci_01.fits";
const FLAT = "night/raw/fflat_01.fits";

beforeAll(() => {
  cwd = smallNight();
  const frame = readFileSync(join(cwd, FRAME));
  writeFileSync(join(cwd, "cut.fits"), frame.subarray(0, 30_000));
  writeFileSync(join(cwd, "empty.fits"), "");
  writeFileSync(join(cwd, "there.fits"), "keep me");
  writeFileSync(join(cwd, "note.txt"), "no frame");
  writeFileSync(join(cwd, "typo.toml"), "[detector]\nsaturatoin = 60000\n");
  writeFileSync(join(cwd, "bad-scene.toml"), 'name = "x"\nseed = -1\n');
  symlinkSync(join(cwd, FRAME), join(cwd, "link.fits"));
  mkdirSync(join(cwd, "folder"));
});
afterAll(() => rmSync(cwd, { recursive: true }));

/** Every file below the folder, with a digest of its bytes. */
function everything(): string[] {
  return (readdirSync(cwd, { recursive: true, withFileTypes: true }) as import("node:fs").Dirent[])
    .filter((entry) => entry.isFile())
    .map((entry) => join(entry.parentPath, entry.name))
    .map((path) => `${path} ${createHash("sha256").update(readFileSync(path)).digest("hex")}`)
    .sort();
}

const extractTo = (output: string, frame = FRAME) => ["extract", frame, "--flat", FLAT, "-o", output];

const REFUSED: [args: string[], sentence: string | RegExp][] = [
  [["look", "nowhere.fits"], "hatchel: nowhere.fits: there is no such file; check the name.\n"],
  [["look", "folder"], "hatchel: folder: this is a folder; name a file in it.\n"],
  [["look", "empty.fits"], /^hatchel: empty\.fits: .+; .+\.\n$/],
  [["look", "cut.fits"], /^hatchel: cut\.fits: HDU 0: the file ends after 27120 of 66000 bytes of data; .+\.\n$/],
  [["look", "note.txt"], /^hatchel: note\.txt: .+; .+\.\n$/],
  [["look", FRAME, "--hdu", "3"], "hatchel: night/raw/sci_01.fits: there is no HDU 3; choose among 0 PRIMARY.\n"],
  [
    ["look", FRAME, "--spectrograph", "typo.toml"],
    "hatchel: typo.toml: unknown key 'detector.saturatoin'; did you mean 'saturation'?\n",
  ],
  [
    ["simulate", "nowhere.toml", "-o", "n"],
    "hatchel: nowhere.toml: there is no such file; give the path of a scene in TOML.\n",
  ],
  [["simulate", "bad-scene.toml", "-o", "n"], /^hatchel: bad-scene\.toml: seed: found -1, .+\.\n$/],
  [
    ["simulate", "scene.toml", "-o", "night"],
    /^hatchel: night\/spectrograph\.toml: this file exists already; .*--force to replace it\.\n$/,
  ],
  [["trace", "nowhere.fits", "-o", "t.fits"], "hatchel: nowhere.fits: there is no such file; check the name.\n"],
  [
    ["trace", "night/raw/arc_01.fits", "-o", "t.fits"],
    /^hatchel: arc_01\.fits was given as a fibre flat, but its light stands in lines .+; .+\.\n$/,
  ],
  [
    ["trace", "night/raw/bias_01.fits", "-o", "t.fits"],
    /^hatchel: bias_01\.fits was given as a fibre flat, but there is hardly any light in it .+; .+\.\n$/,
  ],
  [extractTo("s.fits", "nowhere.fits"), "hatchel: nowhere.fits: there is no such file; check the name.\n"],
  [
    extractTo("s.fits", "cut.fits"),
    /^hatchel: cut\.fits: HDU 0: the file ends after 27120 of 66000 bytes of data; .+\.\n$/,
  ],
  [
    extractTo("s.fits", "night/raw/bias_01.fits"),
    /^hatchel: bias_01\.fits was given as a science frame, but its IMAGETYP 'bias' says that it is a bias; .+\.\n$/,
  ],
  [
    extractTo("there.fits"),
    "hatchel: there.fits: this file exists already; give another name, or --force to replace it.\n",
  ],
  [
    [...extractTo(FRAME), "--force"],
    "hatchel: night/raw/sci_01.fits: the output would be written on an input; give it another name.\n",
  ],
  [
    [...extractTo(FLAT), "--force"],
    "hatchel: night/raw/fflat_01.fits: the output would be written on an input; give it another name.\n",
  ],
  [
    [...extractTo("link.fits"), "--force"],
    "hatchel: link.fits: the output would be written on an input; give it another name.\n",
  ],
  [[...extractTo("folder"), "--force"], "hatchel: folder: this is a folder; name a file in it.\n"],
  [extractTo("no/s.fits"), "hatchel: no/s.fits: the folder no does not exist; make it first.\n"],
  [extractTo("note.txt/s.fits"), "hatchel: note.txt/s.fits: a part of this path is not a folder; give another name.\n"],
  [
    ["extract", FRAME, "--tramlines", FLAT, "-o", "s.fits"],
    /^hatchel: night\/raw\/fflat_01\.fits: there is no HDU "TRAMLINES"; .+\.\n$/,
  ],
  [
    [...extractTo("s.fits"), "--method", "boxcar", "--half-aperture", "50"],
    /^hatchel: --half-aperture is 50 px, but only \d px to either side of a fibre are looked at; give at most that\.\n$/,
  ],
  [
    ["compare", FRAME, "--flat", FLAT, "-o", "no/c.json"],
    "hatchel: no/c.json: the folder no does not exist; make it first.\n",
  ],
  [["verify", FRAME, "--flat", "nowhere.fits"], "hatchel: nowhere.fits: there is no such file; check the name.\n"],
];

describe("a job that cannot be done", () => {
  test.each(REFUSED)("%j is refused in one sentence", (args, sentence) => {
    const before = everything();
    const run = hatchel(args, { cwd });
    expect(run.stderr.replace(/^(assumed|warning): .*\n/gm, "")).toEqual(
      typeof sentence === "string" ? sentence : expect.stringMatching(sentence),
    );
    expect(run).toMatchObject({ code: 1, stdout: "" });
    expect(everything()).toEqual(before);
  });

  test("is told with --quiet too, and is an object with --json", () => {
    const run = hatchel([...extractTo("there.fits"), "--quiet", "--json"], { cwd });
    const message = "there.fits: this file exists already; give another name, or --force to replace it.";
    expect(run).toMatchObject({ code: 1, stderr: `hatchel: ${message}\n` });
    const failure = jsonSchemas.failure.parse(JSON.parse(run.stdout));
    expect(failure).toMatchObject({ command: "extract", error: { kind: "input", message, exitCode: 1 } });
  });

  test("is no reason to replace a file that --force would allow to", () => {
    const run = hatchel([...extractTo("there.fits", "cut.fits"), "--force"], { cwd });
    expect(run.code).toBe(1);
    expect(readFileSync(join(cwd, "there.fits"), "utf8")).toBe("keep me");
  });
});

describe("failures in words", () => {
  test("a defect asks to be reported and shows no stack", () => {
    expect(failureOf(new TypeError("x is undefined\n  at y"))).toEqual({
      kind: "defect",
      exitCode: 1,
      message:
        "this is a defect of hatchel (TypeError: x is undefined); please report it, with what HATCHEL_DEBUG=1 prints.",
    });
  });

  test("what the system refuses is input, with the file's name", () => {
    const error = Object.assign(new Error("EMFILE: too many open files"), { code: "EMFILE", path: "a.fits" });
    expect(failureOf(error)).toEqual({
      kind: "input",
      exitCode: 1,
      message: "a.fits: the system refuses it (EMFILE); check its name and permissions.",
    });
  });

  test("a lack of memory is said as such, another RangeError is a defect", () => {
    expect(failureOf(new RangeError("Array buffer allocation failed")).message).toMatch(
      /^there is not enough memory for frames of this size/,
    );
    expect(failureOf(new RangeError("Invalid array length")).kind).toBe("defect");
  });
});
