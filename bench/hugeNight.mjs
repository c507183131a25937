// A raw frame too large for the simulator's patience, straight into a 16-bit file: 2000 fibres at pitch 5 px in ten blocks,
// Gaussians from a table of 1/64 px, a spectrum that all share but for their brightness, noise from a table of deviates.
// Its tramlines are those that it was made with. Kept in the system's folder for temporary files.
import { closeSync, existsSync, mkdirSync, openSync, renameSync, rmSync, writeFileSync, writeSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { geometryDigest } from "../dist/detector/geometry.js";
import { writeTramlines } from "../dist/tramlines/file.js";
import { hugeSize, pitch, seeded } from "./frame.mjs";

const { nFibre, nx, ny } = hugeSize;
const [gain, readNoise, bias, overscan] = [1.2, 3, 1000, 32];
const [tilt, bow, gap, nBlock] = [8, 10, 7, 10];
const sigma = 1.04;
const perPixel = 64;

export async function openHugeNight() {
  const folder = join(tmpdir(), `hatchel-bench-${nFibre}-1`);
  const night = {
    folder,
    spectrograph: join(folder, "spectrograph.toml"),
    tramlines: join(folder, "tramlines.fits"),
    frame: join(folder, "sci_01.fits"),
    output: join(folder, "spectra.fits"),
  };
  if (!existsSync(folder)) {
    const making = `${folder}-${process.pid}`;
    mkdirSync(making);
    writeFrame(join(making, "sci_01.fits"));
    writeFileSync(join(making, "spectrograph.toml"), spectrographText());
    await writeLines(join(making, "tramlines.fits"));
    rmSync(folder, { recursive: true, force: true });
    renameSync(making, folder);
  }
  return { size: hugeSize, night };
}

const image = `[${overscan + 1}:${overscan + nx},1:${ny}]`;
const place = `[1:${nx},1:${ny}]`;

function spectrographText() {
  return `[detector]
dispersion_axis = 1
saturation = 65535
[[detector.amplifier]]
gain = ${gain}
read_noise = ${readNoise}
data = "${image}"
overscan = "[1:${overscan},1:${ny}]"
place = "${place}"
[slit]
blocks = [${Array.from({ length: nBlock }, () => nFibre / nBlock).join(", ")}]
pitch = ${pitch}
gap = ${gap}
`;
}

/** Middle of fibre k's line, rows. */
function middleOf(k) {
  const block = (i) => gap * Math.floor((i * nBlock) / nFibre);
  return (ny - 1) / 2 + pitch * (k - (nFibre - 1) / 2) + block(k) - block(nFibre - 1) / 2 + 0.3 * Math.sin(7 * k);
}

async function writeLines(path) {
  const geometry = { axis1: nx, axis2: ny, dispersionAxis: 1, data: [image], place: [place], binning: [1, 1] };
  const every = (value) => new Int32Array(nFibre).fill(value);
  const tramlines = {
    ...{ nx, ny, nFibre, degree: 2, state: new Array(nFibre).fill("lit"), seenFrom: every(0), seenTo: every(nx - 1) },
    fibre: Int32Array.from({ length: nFibre }, (_, k) => k + 1),
    block: Int32Array.from({ length: nFibre }, (_, k) => 1 + Math.floor((k * nBlock) / nFibre)),
    legendre: Float64Array.from({ length: 3 * nFibre }, (_, i) => [middleOf(Math.floor(i / 3)), tilt, bow][i % 3]),
    rms: new Float64Array(nFibre).fill(0.01),
    nPoint: every(400),
    profile: { kind: "gaussian", sigma: new Float64Array(nFibre).fill(sigma), widthDegree: 0, relativeError: 0.01 },
    geometryDigest: geometryDigest(/** @type {any} */ (geometry)),
  };
  await writeTramlines(path, /** @type {any} */ (tramlines), { version: "0", options: [], inputs: [] });
}

function writeFrame(path) {
  const file = openSync(path, "w");
  const width = nx + overscan;
  writeSync(file, header(width));
  const slit = slitLight();
  const column = columnShape();
  const deviates = deviatesOf(seeded(5), 65536);
  const next = seeded(7);
  const row = Buffer.alloc(2 * width);
  for (let y = 0; y < ny; y++) {
    let draw = Math.floor(65536 * next());
    for (let i = 0; i < width; i++) {
      draw = (draw + 40503) & 65535;
      const x = i - overscan;
      const light =
        x < 0 ? 0 : 3 + slit.light[Math.round((y - column.shift[x]) * slit.perPixel) - slit.first] * column.flux[x];
      const electrons = light + Math.sqrt(light + readNoise * readNoise) * deviates[(draw + 7 * i * y) & 65535];
      row.writeInt16BE(Math.min(Math.max(Math.round(bias + electrons / gain), 0), 65535) - 32768, 2 * i);
    }
    writeSync(file, row);
  }
  writeSync(file, Buffer.alloc((2880 - ((2 * width * ny) % 2880)) % 2880));
  closeSync(file);
}

function header(width) {
  const cards = [
    ["SIMPLE", "T"],
    ["BITPIX", 16],
    ["NAXIS", 2],
    ["NAXIS1", width],
    ["NAXIS2", ny],
    ["BZERO", 32768],
    ["BSCALE", 1],
    ["EXPTIME", 900],
  ].map(([name, value]) => `${String(name).padEnd(8)}= ${String(value).padStart(20)}`.padEnd(80));
  const text = `${cards.join("")}${"END".padEnd(80)}`;
  return text.padEnd(2880 * Math.ceil(text.length / 2880));
}

/** Light along the slit of all fibres, their brightness in it, at 1/64 px. */
function slitLight() {
  const first = -64 * perPixel;
  const light = new Float32Array((ny + 128) * perPixel);
  for (let k = 0; k < nFibre; k++) {
    const middle = middleOf(k);
    const flux = 20 * 10 ** (2.5 * Math.abs(Math.sin(2.3 * k)));
    const from = Math.round((middle - 6) * perPixel);
    for (let i = from; i < from + 12 * perPixel; i++) {
      const v = (i / perPixel - middle) / sigma;
      light[i - first] += (flux * Math.exp(-v * v * 0.5)) / (sigma * Math.sqrt(2 * Math.PI));
    }
  }
  return { light: overPixels(light), first, perPixel };
}

/** Means over a pixel around each point. */
function overPixels(light) {
  const out = new Float32Array(light.length);
  const half = perPixel / 2;
  let sum = 0;
  for (let i = 0; i < light.length; i++) {
    sum += light[i] - (i >= perPixel ? light[i - perPixel] : 0);
    if (i >= half) out[i - half] = sum / perPixel;
  }
  return out;
}

/** Of every column: how far the lines stand from their middle, and the spectrum. */
function columnShape() {
  const shift = new Float32Array(nx);
  const flux = new Float32Array(nx);
  for (let x = 0; x < nx; x++) {
    const t = (2 * x) / (nx - 1) - 1;
    shift[x] = tilt * t + bow * (1.5 * t * t - 0.5);
    flux[x] = 1 + 0.4 * Math.sin(x / 700) + 4 * Math.exp(-(((x % 600) - 300) ** 2) / 8);
  }
  return { shift, flux };
}

/** Normal deviates (Box & Muller 1958). */
function deviatesOf(next, n) {
  return Float32Array.from({ length: n }, () => Math.sqrt(-2 * Math.log(1 - next())) * Math.cos(2 * Math.PI * next()));
}
