// Hands a frame to joint.py and takes back its spectra and the seconds that the extraction took there, start-up and files
// not counted. Nothing where python3 or scipy is missing.
import { spawnSync } from "node:child_process";
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import { whichTime } from "../timing.mjs";

const python = "/usr/bin/python3";

export function hasScipy() {
  return spawnSync(python, ["-c", "import numpy, scipy.linalg, scipy.special"]).status === 0;
}

/** @param {import("../../dist/reference/extract.js").ExtractionInput} input @param {number} nRun */
export function runNumpy(input, nRun = 1) {
  const folder = mkdtempSync(join(tmpdir(), "hatchel-bench-numpy-"));
  try {
    writeJob(folder, input);
    const milliseconds = Array.from({ length: nRun }, () => 1000 * runOnce(folder));
    return { milliseconds, ...readSpectra(folder) };
  } finally {
    rmSync(folder, { recursive: true });
  }
}

/** @param {string} folder @param {import("../../dist/reference/extract.js").ExtractionInput} input */
function writeJob(folder, input) {
  const { nx, ny, nFibre, halfWindow, blockColumns, bandwidth, profileError, kappa, growKappa } = input;
  const { minRounds, maxRounds, noise, background } = input;
  const counts = { nx, ny, nFibre, halfWindow, blockColumns, bandwidth, minRounds, maxRounds };
  const orders = { nBackgroundX: background.nX, nBackgroundY: background.nY };
  writeFileSync(join(folder, "job.json"), JSON.stringify({ ...counts, ...orders, profileError, kappa, growKappa }));
  const { electrons, mask, trace, width } = input;
  const { bandOfRow, fixedVariance } = noise;
  const arrays = { electrons, mask, trace, width, bandOfRow, fixedVariance, background: background.coefficients };
  for (const [name, array] of Object.entries(arrays)) writeFileSync(join(folder, name), array);
}

/** @param {string} folder */
function runOnce(folder) {
  // One thread, as the loop and the kernel it is compared with.
  const env = { ...process.env, OPENBLAS_NUM_THREADS: "1", OMP_NUM_THREADS: "1" };
  const script = fileURLToPath(new URL("./joint.py", import.meta.url));
  const run = spawnSync(python, [script, folder], { encoding: "utf8", env });
  if (run.status !== 0) throw new Error(`joint.py failed: ${run.stderr}`);
  return JSON.parse(run.stdout)[whichTime()];
}

/** @param {string} folder */
function readSpectra(folder) {
  const bytes = (/** @type {string} */ name) => new Uint8Array(readFileSync(join(folder, `${name}.out`))).buffer;
  const image = (/** @type {string} */ name) => new Float32Array(bytes(name));
  const output = {
    flux: image("flux"),
    variance: image("variance"),
    neighbourCovariance: image("neighbourCovariance"),
    flags: new Int32Array(bytes("flags")),
    chi2: image("chi2"),
    background: image("background"),
  };
  return { output, rejected: new Uint8Array(bytes("rejected")) };
}
