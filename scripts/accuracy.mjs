// Accuracy of the extraction against the truth of simulated frames, as tables in Markdown: npm run accuracy.
//
// The frames are those of 'hatchel demo', and one more that has moved further and is stretched. What is handed to the
// extraction is what an observer would have: raw calibration frames, flats, the spectrograph file. Nothing is drawn
// from the truth but the scores, and, in the last column, the tramlines.
import { mkdtempSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { extractFrame } from "../dist/extraction/extract.js";
import * as hatchel from "../dist/index.js";
import { leastVariances, varianceOverBound } from "../dist/report/bound.js";
import {
  commonScale,
  scoreByDecade,
  scoreCosmicRays,
  scoreLeak,
  scorePeaks,
  scoreTrace,
} from "../dist/report/truth.js";
import { chooseProfile } from "../dist/tramlines/profiles.js";
import { shiftTramlines } from "../dist/tramlines/shift.js";
import { traceFlat } from "../dist/tramlines/trace.js";

const decades = [10, 100, 1000, 10000];
const contrast = 1000;
const brightLine = 1e4;
const boundColumns = Array.from({ length: 24 }, (_, i) => 23 + 50 * i);

const scene = hatchel.parseScene(hatchel.SCENES.demo, "the demo scene");
const still = scene.exposure.find(({ name }) => name === "sci_01");
scene.exposure.push({ ...still, name: "sci_03", shift: -0.28, stretch: -1.5e-4 });

const folder = mkdtempSync(join(tmpdir(), "hatchel-accuracy-"));
try {
  await main();
} finally {
  rmSync(folder, { recursive: true });
}

async function main() {
  await hatchel.writeSimulation(folder, scene);
  const night = await openNight();
  console.log(
    `hatchel ${process.env.npm_package_version ?? ""}, ${new Date().toISOString().slice(0, 10)}, npm run accuracy\n`,
  );
  const { tried, profiles, automatic } = await measureProfiles(night);
  const words = tried.map(({ kind, misfit, error }) => `${kind} ${misfit.toFixed(3)} ± ${error.toFixed(3)}`);
  console.log(`auto takes ${automatic}; misfit on held-out columns of the flats: ${words.join(", ")}\n`);
  for (const name of ["sci_01", "sci_02", "sci_03"]) {
    const { shift, stretch } = scene.exposure.find((exposure) => exposure.name === name);
    console.log(`${name}: light moved by ${shift} px and stretched by ${stretch} px a pixel since the flat\n`);
    console.log(`${await frameTable(night, name, profiles, automatic)}\n`);
  }
}

/** What an observer would have. */
async function openNight() {
  const spectrograph = await hatchel.readSpectrograph(join(folder, "spectrograph.toml"));
  const raw = (kind) => scene.exposure.filter((one) => one.kind === kind).map((one) => rawFile(one.name));
  const calibrations = await hatchel.loadCalibrations(
    { bias: raw("bias"), pixelFlat: raw("detector-flat") },
    spectrograph,
  );
  const read = async (path, role) =>
    hatchel.correctFrame(await hatchel.readImage(path), calibrations, spectrograph, { role });
  const flats = [];
  for (const path of raw("fibre-flat")) flats.push(await read(path, "fibre flat"));
  return { spectrograph, flats, read: (name) => read(rawFile(name), "science") };
}

function rawFile(name) {
  return join(folder, "raw", `${name}.fits`);
}

async function measureProfiles({ flats, spectrograph }) {
  const { tramlines } = await traceFlat(flats, spectrograph.slit);
  const chosen = await chooseProfile(flats, tramlines, "auto");
  const automatic = chosen.tramlines.profile.kind;
  const profiles = {};
  for (const kind of ["gaussian", "hermite", "empirical"]) {
    profiles[kind] = kind === automatic ? chosen.tramlines : (await chooseProfile(flats, tramlines, kind)).tramlines;
  }
  return { tried: chosen.tried, profiles, automatic };
}

async function frameTable(night, name, profiles, automatic) {
  const frame = await night.read(name);
  const flatTruth = hatchel.simulateExposure(scene, "fflat_01").truth;
  const { truth } = hatchel.simulateExposure(scene, name);
  const readNoise = scene.detector.amplifier.map((amplifier) => amplifier.read_noise);
  const known = { ...truth, readNoise: Math.max(...readNoise) };
  const bounds = boundColumns.map((x) => boundsOf(truth, x));
  const joint = (kind) => ({ title: `joint, ${kind}`, tramlines: profiles[kind], options: { method: "joint" } });
  const runs = [
    { title: "boxcar, uncorrected", tramlines: profiles[automatic], options: { method: "boxcar", crosstalk: false } },
    ...["gaussian", "hermite", "empirical"].map(joint),
    {
      title: `joint, ${automatic}, true trace`,
      tramlines: onTrueTrace(profiles[automatic], truth),
      options: { method: "joint", shift: false },
    },
  ];
  const columns = [];
  for (const { title, tramlines, options } of runs) {
    const extraction = await extractFrame(frame, tramlines, options);
    const scored = figures(extraction, tramlines, known, flatTruth, bounds);
    if (columns.length === 0) columns.push(["", ...scored.map(([row]) => row)]);
    columns.push([title, ...scored.map(([, value]) => value)]);
  }
  const rows = columns[0].map((_, i) => `| ${columns.map((column) => column[i]).join(" | ")} |`);
  rows.splice(1, 0, `| --- |${" ---: |".repeat(columns.length - 1)}`);
  return rows.join("\n");
}

/** Least variances of column x, by the true profiles and the true light; NaN for dead fibres. */
function boundsOf(truth, x) {
  const { nx, ny, nFibre, lit, bad, response } = truth;
  const fibres = lit.flatMap((one, k) => (one ? [k] : []));
  const profiles = new Float64Array(fibres.length * ny);
  fibres.forEach((k, i) => {
    profiles.set(truth.truthProfile(k, x, 0, ny), i * ny);
  });
  const light = truth.expectedElectrons();
  const { read_noise } = scene.detector.amplifier[x < nx / 2 ? 0 : 1];
  const variance = Float64Array.from({ length: ny }, (_, y) => {
    const at = y * nx + x;
    return bad[at] ? Number.POSITIVE_INFINITY : (read_noise ** 2 + light[at]) / response[at] ** 2;
  });
  const all = new Float64Array(nFibre).fill(Number.NaN);
  leastVariances(profiles, variance).forEach((least, i) => {
    all[fibres[i]] = least;
  });
  return all;
}

function onTrueTrace(tramlines, { traceLegendre, traceTerms, nFibre, nx }) {
  const everywhere = { seenFrom: new Int32Array(nFibre), seenTo: new Int32Array(nFibre).fill(nx - 1) };
  return { ...tramlines, ...everywhere, legendre: traceLegendre, degree: traceTerms - 1 };
}

/** [row, value] of everything that is asked of one extraction. */
function figures({ spectra, shift }, tramlines, truth, flatTruth, bounds) {
  const scale = commonScale(spectra, truth);
  const rescaled = { ...spectra, flux: spectra.flux.map((flux) => flux / scale) };
  const [scores, scaled] = [scoreByDecade(spectra, truth), scoreByDecade(rescaled, truth)];
  const leak = scoreLeak(spectra, truth, contrast);
  const hits = scoreCosmicRays(spectra, truth);
  const peaks = scorePeaks(spectra, truth, brightLine);
  const moved = shift === null ? tramlines : shiftTramlines(tramlines, shift);
  const trace = scoreTrace(hatchel.tramlineHeights(moved), truth.trace, truth.lit, scene.slit.pitch);
  const pulls = decades.map((from) => {
    const of = (list) => list.find((score) => score.from === from).pull.toFixed(2);
    return [`pull, ${power(from)} – ${power(10 * from)} e⁻ (after one scale)`, `${of(scores)} (${of(scaled)})`];
  });
  const shiftRow = shift === null ? "given" : shiftError(tramlines, moved, truth, flatTruth);
  return [
    ...pulls,
    ["common scale", scale.toFixed(4)],
    ["bias in these decades, %", decades.map((from) => signed(100 * biasOf(scores, from), 1, "")).join(", ")],
    [`leak, ${leak.nFibre} fibres: mean, worst`, `${share(leak.meanShare)}, ${share(leak.worstShare)}`],
    [`cosmic rays: ${hits.nHit} hits, missed, spoilt`, `${percent(1 - hits.foundShare)}, ${percent(hits.spoiltShare)}`],
    [`of ${hits.nClean} clean points flagged`, share(hits.falseShare)],
    [`${peaks.nPeak} line peaks: found / true, flagged`, `${peaks.ratio.toFixed(4)}, ${percent(peaks.flaggedShare)}`],
    ["trace: rms, worst fibre, px", `${trace.rms.toFixed(4)}, ${trace.worstRms.toFixed(4)}`],
    ["trace: common offset, px", signed(trace.offset, 4, "")],
    ["shift found − true: mean, worst, px", shiftRow],
    ["variance / Cramér–Rao bound", varianceOverBound(spectra, boundColumns, bounds).toFixed(3)],
  ];
}

function biasOf(scores, decade) {
  return scores.find(({ from }) => from === decade).bias;
}

/** Of the surface that was measured, at every point of a lit fibre. */
function shiftError(before, after, truth, flatTruth) {
  const [from, to] = [hatchel.tramlineHeights(before), hatchel.tramlineHeights(after)];
  let [sum, worst, n] = [0, 0, 0];
  for (let i = 0; i < to.length; i++) {
    if (!truth.lit[Math.floor(i / truth.nx)]) continue;
    const error = to[i] - from[i] - (truth.trace[i] - flatTruth.trace[i]);
    sum += error;
    n++;
    if (Math.abs(error) > Math.abs(worst)) worst = error;
  }
  return `${signed(sum / n, 4, "")}, ${signed(worst, 4, "")}`;
}

function power(value) {
  return value < 1000 ? String(value) : `1e${Math.log10(value)}`;
}

function signed(value, digits, unit) {
  return `${value < 0 ? "−" : "+"}${Math.abs(value).toFixed(digits)}${unit}`;
}

function share(value) {
  return value === 0 ? "0" : `${value < 0 ? "−" : ""}${Math.abs(value).toExponential(1)}`;
}

function percent(value) {
  return `${(100 * value).toFixed(1)} %`;
}
