/** Wrong use: one sentence on standard error, exit code 2, and with --json an object on standard output. */
import { readFileSync } from "node:fs";
import { describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { hatchel, lines } from "./spawned.js";

const { version } = JSON.parse(readFileSync(new URL("../../package.json", import.meta.url), "utf8"));

describe("without a job", () => {
  test("the bare command prints its help on standard output and ends with 2", () => {
    const run = hatchel([]);
    expect(run.code).toBe(2);
    expect(run.stderr).toBe("");
    expect(run.stdout).toMatch(/^Usage: hatchel \[options\] \[command\]\n/);
    for (const word of ["demo", "simulate", "look", "trace", "extract", "compare", "verify", "recover"]) {
      expect(run.stdout).toMatch(new RegExp(`^  ${word} `, "m"));
    }
    expect(run.stdout).toContain("Exit codes: 0 done; 1 the job failed, with the reason in one sentence; 2 wrong use.");
  });

  test("help and version end with 0", () => {
    expect(hatchel(["--version"])).toMatchObject({ code: 0, stdout: `${version}\n`, stderr: "" });
    const help = hatchel(["help", "extract"]);
    expect(help).toMatchObject({ code: 0, stderr: "" });
    expect(help.stdout).toBe(hatchel(["extract", "--help"]).stdout);
    expect(help.stdout).toMatch(/--json prints .* has the keys\n {2}hatchel, format, command, output, frame, method,/);
  });
});

const WRONG: [args: string[], sentence: string][] = [
  [["extrat"], "hatchel: unknown command 'extrat'; did you mean extract?"],
  [["frobnicate"], "hatchel: unknown command 'frobnicate'; 'hatchel --help' lists the commands."],
  [["look", "a.fits", "--quite"], "hatchel look: unknown option '--quite'; did you mean --quiet?"],
  [["look", "a.fits", "--zzz"], "hatchel look: unknown option '--zzz'; 'hatchel look --help' lists the options."],
  [["look"], "hatchel look: FRAME is missing; name the file."],
  [
    ["look", "a.fits", "b.fits"],
    "hatchel look: 'b.fits' is one argument too many; 'hatchel look --help' shows what it takes.",
  ],
  [["look", "a.fits", "--hdu"], "hatchel look: --hdu <n> was given without a value; add it after the option."],
  [["look", "a.fits", "--hdu", "-1"], "hatchel: --hdu is '-1'; it must be a whole number, 0 or more."],
  [
    ["trace", "a.fits"],
    "hatchel trace: -o, --output <file> is missing; say where to write, or see 'hatchel trace --help'.",
  ],
  [
    ["extract", "a.fits", "-o", "b.fits"],
    "hatchel extract: neither --flat nor --tramlines is given; give one of them, to tell where the fibres' light runs.",
  ],
  [
    ["compare", "a.fits", "--flat", "f.fits", "--tramlines", "t.fits"],
    "hatchel compare: both --flat and --tramlines are given; give one of them, to tell where the fibres' light runs.",
  ],
  [
    ["extract", "--flat", "f.fits", "a.fits", "-o", "b.fits"],
    "hatchel extract: FRAME is missing; --flat takes all the files behind it, so put FRAME in front of it.",
  ],
  [
    ["extract", "a.fits", "--flat", "f.fits", "-o", "b.fits", "--method", "best"],
    "hatchel: --method is 'best'; it must be joint, optimal or boxcar.",
  ],
  [
    ["extract", "a.fits", "--flat", "f.fits", "-o", "b.fits", "--crosstalk", "yes"],
    "hatchel: --crosstalk is 'yes'; it must be on or off.",
  ],
  [["verify", "a.fits", "--tramlines", "t.fits", "--refine", "no"], "hatchel: --refine is 'no'; it must be on or off."],
  [
    ["extract", "a.fits", "--flat", "f.fits", "-o", "b.fits", "--half-aperture", "0"],
    "hatchel: --half-aperture is '0'; it must be a number of pixels over 0.",
  ],
  [
    ["extract", "a.fits", "--flat", "f.fits", "-o", "b.fits", "--half-aperture", "2"],
    "hatchel extract: --half-aperture is the boxcar's, but the method is joint; choose --method boxcar with it.",
  ],
  [
    ["extract", "a.fits", "--flat", "f.fits", "-o", "b.fits", "--crosstalk", "off"],
    "hatchel extract: --crosstalk off, but joint always parts neighbours' light; choose --method optimal or boxcar with it.",
  ],
  [
    ["extract", "-", "--flat", "-", "-o", "b.fits"],
    "hatchel: - stands for several files, but standard input holds one; name the others.",
  ],
];

describe("wrong use", () => {
  test.each(WRONG)("%j is told in one sentence", (args, sentence) => {
    expect(hatchel(args)).toMatchObject({ code: 2, stdout: "", stderr: `${sentence}\n` });
  });

  test("is an object with --json", () => {
    const run = hatchel(["extract", "a.fits", "-o", "b.fits", "--json"]);
    expect(run.code).toBe(2);
    const { command, error } = jsonSchemas.failure.parse(JSON.parse(run.stdout));
    expect(command).toBe("extract");
    expect(error).toEqual({ kind: "usage", exitCode: 2, message: lines(run.stderr)[0] });
  });

  test("is --json beside -o -, which both want standard output", () => {
    const run = hatchel(["trace", "a.fits", "-o", "-", "--json"]);
    expect(run.code).toBe(2);
    expect(run.stderr).toBe("hatchel trace: --json and -o - both write to standard output; give -o a file's name.\n");
  });
});
