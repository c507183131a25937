// Files for timing whole commands: two simulated flats and a science frame of a given size as raw 16-bit FITS, and the tramlines
// that `hatchel trace` makes of the first flat. Kept in the system's folder for temporary files, since they take a minute to make.
import { spawnSync } from "node:child_process";
import { createHash } from "node:crypto";
import { existsSync, mkdirSync, readdirSync, readFileSync, renameSync, rmSync, statSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";

const dist = fileURLToPath(new URL("../dist/", import.meta.url));
export const executable = fileURLToPath(new URL("../bin/hatchel.js", import.meta.url));

/** @param {{ nFibre: number, nx: number, ny: number }} size */
export function openNight(size) {
  const scene = sceneText(size);
  const folder = join(tmpdir(), `hatchel-bench-${size.nFibre}-${digest([scene])}`);
  if (!existsSync(join(folder, "raw"))) simulate(folder, scene);
  const tramlines = join(folder, `tramlines-${digest(sources(dist))}.fits`);
  const spectrograph = join(folder, "spectrograph.toml");
  if (!existsSync(tramlines)) {
    for (const old of readdirSync(folder)) if (old.startsWith("tramlines-")) rmSync(join(folder, old));
    const flat = join(folder, "raw", "fflat_01.fits");
    hatchel(["trace", flat, "-o", tramlines, "--spectrograph", spectrograph, "--profile", "empirical", "--quiet"]);
  }
  return {
    folder,
    spectrograph,
    tramlines,
    flats: [1, 2].map((i) => join(folder, "raw", `fflat_0${i}.fits`)),
    frame: join(folder, "raw", "sci_01.fits"),
    output: join(folder, "spectra.fits"),
  };
}

/** @param {string[]} args */
export function hatchel(args) {
  const run = spawnSync(process.execPath, [executable, ...args], { encoding: "utf8" });
  if (run.status !== 0) throw new Error(`hatchel ${args[0]} failed: ${run.stderr}`);
  return run.stdout;
}

/** Under another name until it is whole; without the truth, which is large and not asked for. */
function simulate(folder, scene) {
  const making = `${folder}-${process.pid}`;
  mkdirSync(making, { recursive: true });
  writeFileSync(join(making, "scene.toml"), scene);
  hatchel(["simulate", join(making, "scene.toml"), "-o", making, "--quiet", "--force"]);
  rmSync(join(making, "truth"), { recursive: true, force: true });
  rmSync(folder, { recursive: true, force: true });
  renameSync(making, folder);
}

/** Contents of all files below `folder`, in order. @param {string} folder @returns {(string | Buffer)[]} */
function sources(folder) {
  return readdirSync(folder, { recursive: true, encoding: "utf8" })
    .sort()
    .map((name) => join(folder, name))
    .filter((path) => statSync(path).isFile() && /\.(js|wasm)$/.test(path))
    .map((path) => readFileSync(path));
}

/** @param {(string | Buffer)[]} parts */
function digest(parts) {
  const hash = createHash("sha256");
  for (const part of parts) hash.update(part);
  return hash.digest("hex").slice(0, 12);
}

/** Ten blocks at pitch 5 px; two amplifiers side by side; skewed profiles with wings; cosmic rays. */
function sceneText({ nFibre, nx, ny }) {
  const half = nx / 2;
  const blocks = Array.from({ length: 10 }, () => nFibre / 10);
  const bow = nx / 1024;
  return `name = "bench of ${nFibre} fibres"
seed = 11
[detector]
size = [${nx}, ${ny}]
saturation = 65535
dark = 0.0005
response_rms = 0.008
[[detector.amplifier]]
gain = 1.2
read_noise = 3.0
bias = 1000
drift = 1.0
overscan = 32
place = "[1:${half},1:${ny}]"
[[detector.amplifier]]
gain = 1.25
read_noise = 3.1
bias = 1010
drift = 1.2
overscan = 32
place = "[${half + 1}:${nx},1:${ny}]"
[slit]
blocks = [${blocks.join(", ")}]
pitch = 5
gap = 7
dead = [${Math.floor(0.07 * nFibre)}, ${Math.floor(0.41 * nFibre)}, ${Math.floor(0.75 * nFibre)}]
[tramlines]
tilt = ${0.6 * bow}
fan = 0.5
bow = ${bow}
bow_fan = 0.5
curl = -0.1
own_place = 0.05
own_tilt = 0.03
own_bow = 0.02
[profile]
fwhm = 2.4
tilt = 0.03
bow = 0.03
across = -0.02
across_bow = 0.03
own_width = 0.02
second_share = 0.12
second_width = 1.55
second_offset = 0.2
wing_share = 0.02
wing = "exponential"
wing_scale = 4
reach = 45
[wavelength]
range = [7350, 5500]
curve = 14
fwhm = 2.3
[light]
throughput_rms = 0.06
throughput_slope = 0.08
flat_rate = 2600
detector_flat_rate = 2000
scattered_share = 0.02
[science]
faintest = 10
brightest = 1e5
seconds = 900
sky_level = 5
sky_line = 6000
[cosmic_rays]
rate = ${Math.round((nx * ny) / 11000)}
length = 5
electrons = 2500
[[exposure]]
name = "fflat_01"
kind = "fibre-flat"
seconds = 12
[[exposure]]
name = "fflat_02"
kind = "fibre-flat"
seconds = 12
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
shift = 0.15
`;
}
