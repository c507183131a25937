/** Does a frame look like what it was handed over as? Each of these mistakes is met at every telescope: a bias with
 * light in it, a dark of 0 s, a flat with the lamp off, an arc handed as a flat. The header is asked, then the pixels:
 * when both disagree with the role it is an error, when only the header does it is a warning. */
import type { Assembled } from "./assemble.js";
import { DetectorError } from "./detectorError.js";
import { darkSeconds, type ExposureKind, exposureKind, exposureSeconds } from "./exposure.js";
import { type Levels, largestReadNoise, levelsOf } from "./levels.js";
import type { RawImage } from "./raw.js";
import { percent } from "./rawSanity.js";

export type Role = "bias" | "dark" | "pixel flat" | "fibre flat" | "arc" | "science";

/** Kinds that may play a role without a word. */
const FITTING: Record<Role, ExposureKind[]> = {
  bias: ["bias"],
  dark: ["dark"],
  "pixel flat": ["detector flat", "flat"],
  "fibre flat": ["fibre flat", "flat", "twilight"],
  arc: ["arc"],
  science: ["science", "twilight", "arc", "fibre flat", "flat"],
};

/** With their articles, for sentences. */
const CALLED: Record<Role | ExposureKind, string> = {
  bias: "a bias",
  dark: "a dark",
  "pixel flat": "a pixel flat",
  "detector flat": "a detector flat",
  "fibre flat": "a fibre flat",
  flat: "a flat",
  arc: "an arc",
  twilight: "a twilight",
  science: "a science frame",
  unknown: "unknown",
};

/** A bias "exposure" may carry a shutter's rounding. */
const LONGEST_BIAS_SECONDS = 1;
/** A flat with less light than this is no flat. */
const FAINTEST_FLAT_ELECTRONS = 200;
const MOST_SATURATED = 0.01;
const ENOUGH_OF_ROW = 512;
/** Pixels of one detector respond alike within this (robust scatter); fibres or lines are many times more uneven. */
export const MOST_RESPONSE_SCATTER = 0.1;

/** Warnings for a frame in this role.
 * @throws DetectorError when the pixels, or a time in the header, contradict it. */
export function checkRole(raw: RawImage, frame: Assembled, role: Role): string[] {
  const { kind, said } = exposureKind(raw);
  const problem = problemOf(raw, frame, role);
  const headerAgrees = kind === "unknown" || FITTING[role].includes(kind);
  if (problem !== undefined) {
    const header = headerAgrees ? "" : `, and its ${said} is not ${CALLED[role]}`;
    throw new DetectorError(
      `${raw.name} was given as ${CALLED[role]}, but ${problem}${header}; check the list of frames.`,
    );
  }
  if (headerAgrees) return [];
  if (mustAgree(role, kind)) {
    throw new DetectorError(
      `${raw.name} was given as ${CALLED[role]}, but its ${said} says that it is ${CALLED[kind]}; check the list of frames, or correct the header.`,
    );
  }
  return [
    `${raw.name} is used as ${CALLED[role]}, though its ${said} says ${CALLED[kind]}; its pixels do not contradict the role.`,
  ];
}

/** Pairs that pixels cannot tell apart well enough to overrule the header. */
function mustAgree(role: Role, kind: ExposureKind): boolean {
  if (role === "fibre flat") return kind !== "twilight";
  if (role === "pixel flat") return kind === "science" || kind === "arc" || kind === "fibre flat";
  return (role === "science" || role === "arc") && (kind === "bias" || kind === "dark");
}

function problemOf(raw: RawImage, frame: Assembled, role: Role): string | undefined {
  if (role === "science" || role === "arc") return undefined;
  const levels = levelsOf(frame);
  switch (role) {
    case "bias":
      return biasProblem(raw, frame, levels);
    case "dark":
      return darkProblem(raw, frame, levels);
    case "pixel flat":
      return flatProblem(frame, levels) ?? unevenProblem(levels);
    case "fibre flat":
      return flatProblem(frame, levels) ?? arcProblem(frame);
  }
}

function biasProblem(raw: RawImage, frame: Assembled, levels: Levels): string | undefined {
  const seconds = exposureSeconds(raw);
  if (seconds > LONGEST_BIAS_SECONDS) return `it was exposed for ${seconds} s`;
  const readNoise = largestReadNoise(frame);
  // A Gaussian's 5 to 95 % range is 3.3 σ; fixed structure of a few electrons may widen it.
  const range = levels.p95 - levels.p5;
  const hasOverscan = frame.regions.every((region) => region.overscan !== undefined);
  if (hasOverscan && range > 12 * readNoise) {
    return `there is light in it (5 to 95 % of its pixels span ${range.toFixed(0)} e⁻ at a read noise of ${readNoise.toFixed(1)} e⁻)`;
  }
  if (hasOverscan && levels.median > 10 * readNoise) {
    return `there is light in it (its median lies ${levels.median.toFixed(0)} e⁻ above the overscan)`;
  }
  return undefined;
}

function darkProblem(raw: RawImage, frame: Assembled, levels: Levels): string | undefined {
  const seconds = darkSeconds(raw);
  if (!(seconds > 0)) {
    const found = Number.isNaN(seconds) ? "its header gives no EXPTIME or DARKTIME" : `it lasted ${seconds} s`;
    return `${found}, and a dark current per second cannot come from that`;
  }
  const readNoise = largestReadNoise(frame);
  const expected = Math.sqrt(readNoise ** 2 + Math.max(0, levels.median));
  const range = levels.p95 - levels.p5;
  if (range > 12 * expected) {
    return `there is light in it (5 to 95 % of its pixels span ${range.toFixed(0)} e⁻ where noise explains ${(3.3 * expected).toFixed(0)} e⁻)`;
  }
  return undefined;
}

function flatProblem(frame: Assembled, levels: Levels): string | undefined {
  if (levels.saturatedShare > MOST_SATURATED) {
    return `${percent(levels.saturatedShare)} of its pixels are saturated`;
  }
  return levels.p99 - levels.p1 < Math.max(FAINTEST_FLAT_ELECTRONS, 10 * largestReadNoise(frame)) &&
    levels.median < FAINTEST_FLAT_ELECTRONS
    ? noLight(levels)
    : undefined;
}

/** Most of a detector lies in the dark under an arc or a science frame; a pixel flat lights all of it. */
function unevenProblem({ median, p99 }: Levels): string | undefined {
  if (median >= FAINTEST_FLAT_ELECTRONS) return undefined;
  return `half of its pixels hold less than ${median.toFixed(0)} e⁻ while 1 % hold over ${p99.toFixed(0)} e⁻, and a pixel flat lights the detector evenly`;
}

function noLight(levels: Levels): string {
  return `there is hardly any light in it (median ${levels.median.toFixed(0)} e⁻, 99 % of its pixels below ${levels.p99.toFixed(0)} e⁻), as with the lamp off`;
}

/** Light of a flat fills its ribbons from end to end, light of an arc stands in lines: along the brightest rows the
 * median of a flat is near its mean, that of an arc far below. */
function arcProblem({ electrons, nx, ny }: Assembled): string | undefined {
  const rows = Array.from({ length: ny }, (_, y) => sampleOf(electrons, y * nx, nx))
    .filter((row) => row.length > 0)
    .map((sample) => ({ sample, mean: sample.reduce((sum, value) => sum + value, 0) / sample.length }))
    .sort((a, b) => b.mean - a.mean)
    .slice(0, Math.max(1, Math.floor(ny / 5)));
  const mean = rows.reduce((sum, row) => sum + row.mean, 0);
  const median = rows.reduce((sum, row) => sum + upperMedian(row.sample), 0);
  if (!(median < 0.35 * mean)) return undefined;
  return `its light stands in lines (along its bright rows the median is ${percent(median / mean)} of the mean), as in an arc`;
}

/** Finite pixels of a row, evenly chosen where there are more than are needed to tell lines from a continuum. */
function sampleOf(electrons: Float32Array, from: number, nx: number): Float32Array {
  const step = Math.max(1, Math.floor(nx / ENOUGH_OF_ROW));
  const sample = new Float32Array(Math.ceil(nx / step));
  let n = 0;
  for (let x = 0; x < nx; x += step) {
    const value = electrons[from + x];
    if (Number.isFinite(value)) sample[n++] = value;
  }
  return sample.subarray(0, n);
}

function upperMedian(sample: Float32Array): number {
  return sample.sort()[sample.length >> 1];
}
