// Whole cold processes: `hatchel extract` from a raw 16-bit FITS file and ready tramlines with a measured profile to written
// spectra; Node's start, reading, correction, shift, names, background, extraction, checksums and writing included. The
// input is in the system's cache of files; the output is not forced to the disk.
import { spawnSync } from "node:child_process";
import { rmSync, statSync } from "node:fs";
import { fileURLToPath } from "node:url";
import { sizes } from "./frame.mjs";
import { firstTouch } from "./machine.mjs";
import { executable, hatchel, openNight } from "./night.mjs";
import { peakOf } from "./peak.mjs";
import { folderTimes } from "./profileFolders.mjs";
import { duration, figures, times } from "./table.mjs";
import { ratio, timing } from "./timing.mjs";

export const title = "whole process, hatchel extract, raw FITS to spectra, joint, measured profile";

/** Rounds end once a row has taken this long. */
const rowMilliseconds = 30_000;
const mostRounds = 9;

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const help = hatchel(["extract", "--help"]);
  const variants = variantsOf(help);
  const names = Object.keys(variants);
  const cases = sizes.slice(0, small ? 2 : 3).map((size) => measure(size, variants));
  const idle = peakOf(["-e", ""]);
  const rows = cases.map((one) => [
    `${one.size.nFibre} × ${one.size.nx}`,
    ...names.map((name) => duration(one.timings[name].median)),
    one.timings["1 thread"] ? times(ratio(one.timings["1 thread"], one.timings[names[0]])) : "–",
    `${figures((one.peakBytes - idle) / 2 ** 20)} MiB`,
    times((one.peakBytes - idle) / one.leastBytes),
    ...one.folders.map(({ share }) => `${figures(100 * share)} %`),
  ]);
  const folders = cases[0].folders.map(({ name }) => `of it: ${name}`);
  const head = ["fibres × columns", ...names, "1 thread ÷ all", "peak memory", "÷ (frame + spectra)", ...folders];
  return {
    head,
    rows,
    notes: [
      `A MiB of memory costs ${figures(firstTouch())} ms at its first touch on this machine, whoever asks for it.`,
      `Peak memory is the most that the process held less what an idle Node holds (${figures(idle / 2 ** 20)} MiB); (frame + spectra) ` +
        "is the frame as Float32 and the written file. Where the time goes is by samples of the main thread, each counted for the " +
        "innermost of these folders on its stack, WebAssembly apart; the command from single modules, whose loading takes longer.",
    ],
    cases,
  };
}

/** The command in single modules, whose folders a sample can tell. */
const unbundled = fileURLToPath(new URL("../dist/commands/main.js", import.meta.url));

/** Names and further arguments, as far as the command knows them. @param {string} help @returns {Record<string, string[]>} */
function variantsOf(help) {
  const plain = help.includes("--refine") ? ["--refine", "off"] : [];
  const threads = help.includes("--threads");
  return {
    [plain.length > 0 ? "as it lies" : "profile refined"]: plain,
    ...(threads ? { "1 thread": [...plain, "--threads", "1"] } : {}),
    ...(plain.length > 0 ? { "profile refined": [] } : {}),
    f32: [...plain, "--precision", "f32"],
    "plain sum": [...plain, "--method", "boxcar"],
  };
}

function measure(size, variants) {
  const night = openNight(size);
  const command = [
    "extract",
    night.frame,
    "-o",
    night.output,
    "--tramlines",
    night.tramlines,
    "--spectrograph",
    night.spectrograph,
  ];
  const argumentsOf = (name) => [executable, ...command, "--force", "--quiet", ...variants[name]];
  const names = Object.keys(variants);
  const taken = Object.fromEntries(names.map((name) => [name, []]));
  const began = performance.now();
  let nRound = 0;
  do {
    for (const name of names) taken[name].push(spawned(argumentsOf(name)));
    nRound++;
  } while (nRound < mostRounds && performance.now() - began < rowMilliseconds);
  const peakBytes = peakOf(argumentsOf(names[0]));
  const leastBytes = 4 * size.nx * size.ny + statSync(night.output).size;
  const folders = folderTimes([unbundled, ...argumentsOf(names[0]).slice(1)], night.folder);
  rmSync(night.output);
  return {
    size,
    timings: Object.fromEntries(names.map((name) => [name, timing(taken[name])])),
    peakBytes,
    leastBytes,
    folders,
  };
}

/** Milliseconds from start to end of a process. @param {string[]} args */
function spawned(args) {
  const began = performance.now();
  const run = spawnSync(process.execPath, args, { encoding: "utf8" });
  const taken = performance.now() - began;
  if (run.status !== 0) throw new Error(`${args[1] ?? args[0]} failed: ${run.stderr}`);
  return taken;
}
