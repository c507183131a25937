/** Small fibre flats with known truth, drawn by code that shares nothing with the tracing: sums of Gaussians integrated
 * over pixels by a rational erf, skewed and winged on request, with photon and read noise, cosmic rays and bad columns. */
import { xoroshiro128plus } from "pure-rand/generator/xoroshiro128plus";
import type { Frame } from "../../src/detector/frame.js";
import { Header } from "../../src/fits/header.js";
import type { SlitLayout } from "../../src/tramlines/layout.js";

export interface FlatScene {
  seed: number;
  nx: number;
  layout: SlitLayout;
  fwhm: number;
  /** Sag of the tramlines over the whole width, px, and tilt, px. */
  sag: number;
  tilt: number;
  /** e⁻ of a fibre in a column. */
  light: number;
  /** Relative light of single fibres, by slit position; others scatter by a few per cent about 1. 0: dead. */
  lightOf?: Record<number, number>;
  /** px upwards, with the detector's size as it was. */
  moved?: number;
  /** True pitch over the layout's. */
  scale?: number;
  /** Share of each fibre's light in a broad wing. */
  wing?: number;
  /** Shift between two halves of the profile, px: a skew. */
  skew?: number;
  nCosmic?: number;
  readNoise?: number;
  /** How bright a column is, relative. */
  spectrum?: (x: number) => number;
}

export interface DrawnFlat {
  frame: Frame;
  /** [fibre]: nx centroids, px. */
  truth: Float64Array[];
  /** [fibre]: mean relative light. */
  light: Float64Array;
  sigma: number;
}

const MARGIN = 14;

export function drawFlat(scene: FlatScene): DrawnFlat {
  const random = streamOf(scene.seed);
  const { layout, nx } = scene;
  const base = slitPositions(layout, scene.scale ?? 1).map((y) => y + 0.1 * (random.uniform() - 0.5));
  const span = base[base.length - 1];
  const lowest = Math.max(0, -scene.sag) + Math.max(0, -scene.tilt);
  const ny = Math.ceil(2 * MARGIN + span + Math.abs(scene.sag) + Math.abs(scene.tilt));
  const light = Float64Array.from(base, (_, k) => {
    const listed = layout.dead.includes(k + 1) ? 0 : 1 + 0.06 * random.normal();
    return scene.lightOf?.[k + 1] ?? listed;
  });
  const truth = base.map((y, k) => {
    const sag = scene.sag * (1 + 0.15 * (k / base.length - 0.5));
    return Float64Array.from({ length: nx }, (_, x) => {
      const t = nx > 1 ? (2 * x) / (nx - 1) - 1 : 0;
      return (
        MARGIN +
        lowest +
        (scene.moved ?? 0) +
        y +
        sag * t * t +
        0.5 * scene.tilt * (t + 1) +
        0.3 * t ** 3 * (k / base.length)
      );
    });
  });
  const sigma = scene.fwhm / 2.3548;
  const model = new Float64Array(nx * ny).fill(3);
  const spectrum = scene.spectrum ?? ((x: number) => 1 - 0.5 * ((2 * x) / nx - 1) ** 2);
  for (let k = 0; k < base.length; k++) {
    if (light[k] === 0) continue;
    for (let x = 0; x < nx; x++)
      addFibre(model, nx, ny, x, truth[k][x], scene.light * light[k] * spectrum(x), sigma, scene);
  }
  return { frame: expose(model, nx, ny, scene, random), truth, light, sigma };
}

export function slitPositions(layout: SlitLayout, scale: number): number[] {
  const positions: number[] = [];
  let y = 0;
  layout.blocks.forEach((count, b) => {
    for (let i = 0; i < count; i++) {
      const gap = i === 0 && b > 0 ? (typeof layout.gap === "number" ? layout.gap : layout.gap[b - 1]) : 0;
      if (positions.length > 0) y += (layout.pitch + gap) * scale;
      positions.push(y);
    }
  });
  return positions;
}

function addFibre(
  model: Float64Array,
  nx: number,
  ny: number,
  x: number,
  centre: number,
  light: number,
  sigma: number,
  scene: FlatScene,
): void {
  const wing = scene.wing ?? 0;
  const skew = scene.skew ?? 0;
  // Unequal parts, shifted so that their common centroid is the centre: 0.75 · (−s/4) + 0.25 · (3s/4) = 0.
  const parts = [
    { share: 0.75 * (1 - wing), at: centre - 0.25 * skew, sigma },
    { share: 0.25 * (1 - wing), at: centre + 0.75 * skew, sigma },
    { share: wing, at: centre, sigma: 3.2 * sigma },
  ];
  for (const part of parts) {
    if (part.share === 0) continue;
    const reach = 5 * part.sigma;
    const from = Math.max(0, Math.ceil(part.at - reach));
    let low = cumulative((from - 0.5 - part.at) / part.sigma);
    for (let y = from; y <= Math.min(ny - 1, part.at + reach); y++) {
      const high = cumulative((y + 0.5 - part.at) / part.sigma);
      model[y * nx + x] += light * part.share * (high - low);
      low = high;
    }
  }
}

/** Normal cumulative distribution, Abramowitz & Stegun 7.1.26 (absolute error below 1.5e-7). */
function cumulative(v: number): number {
  const z = Math.abs(v) / Math.SQRT2;
  const t = 1 / (1 + 0.3275911 * z);
  const poly = t * (0.254829592 + t * (-0.284496736 + t * (1.421413741 + t * (-1.453152027 + t * 1.061405429))));
  const half = 0.5 * poly * Math.exp(-z * z);
  return v < 0 ? half : 1 - half;
}

function expose(model: Float64Array, nx: number, ny: number, scene: FlatScene, random: Stream): Frame {
  const readNoise = scene.readNoise ?? 4;
  const electrons = Float32Array.from(model, (m) => m + Math.sqrt(m + readNoise * readNoise) * random.normal());
  const mask = new Uint8Array(nx * ny);
  for (let i = 0; i < (scene.nCosmic ?? 0); i++) {
    const [x, y] = [Math.floor(random.uniform() * nx), Math.floor(random.uniform() * ny)];
    const length = 1 + Math.floor(4 * random.uniform());
    for (let j = 0; j < length; j++) {
      if (x + j < nx && y + (j >> 1) < ny)
        electrons[(y + (j >> 1)) * nx + x + j] += scene.light * (0.1 + random.uniform());
    }
  }
  return {
    name: "flat",
    nx,
    ny,
    electrons,
    mask,
    noise: { bandOfRow: new Uint8Array(ny), fixedVariance: new Float32Array(nx).fill(readNoise * readNoise) },
    geometry: {
      axis1: nx,
      axis2: ny,
      dispersionAxis: 1,
      data: [`[1:${nx},1:${ny}]`],
      place: [`[1:${nx},1:${ny}]`],
      binning: [1, 1],
      digest: `${nx}x${ny}`,
    },
    exposureSeconds: 10,
    header: new Header(),
    assumptions: [],
    warnings: [],
  };
}

interface Stream {
  uniform(): number;
  normal(): number;
}

export function streamOf(seed: number): Stream {
  const generator = xoroshiro128plus(seed);
  // Small seeds fill few bits of the state: the first numbers of neighbouring seeds look alike.
  for (let i = 0; i < 32; i++) generator.next();
  const uniform = () => ((generator.next() >>> 5) * 67108864 + (generator.next() >>> 6)) / 9007199254740992;
  // Box–Muller; photon noise of hundreds of electrons is a Gaussian for these tests' purpose.
  const normal = () => Math.sqrt(-2 * Math.log(1 - uniform())) * Math.cos(2 * Math.PI * uniform());
  return { uniform, normal };
}
