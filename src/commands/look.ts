/** hatchel look: what is in a frame, and what would be assumed of it. */
import type { Command } from "commander";
import { type LookReport, lookAt } from "../detector/look.js";
import type { AmplifierNoise } from "../detector/noise.js";
import { readSpectrograph } from "../spectrograph.js";
import { addCommonOptions, hduOption } from "./frameOptions.js";
import type { JsonOf } from "./json.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import { counted, fixed, percentage, textPairs, textTable } from "./textTable.js";

interface LookOptions extends CommonOptions {
  spectrograph?: string;
  bias?: string[];
  flat?: string[];
  hdu?: number;
}

export function addLook(command: Command): void {
  command
    .description(
      "Shows what a raw frame holds and what would be assumed of it. Two bias frames measure the read noise, two flats the gain.",
    )
    .argument("<FRAME>", "the raw frame; - is standard input")
    .option("--spectrograph <file>", "what is known of detector and slit, in TOML")
    .option("--bias <file...>", "two or more bias frames, to measure the read noise")
    .option("--flat <file...>", "two or more flats of the same light, to measure the gain")
    .addOption(hduOption());
  addCommonOptions(command).action((frame: string, options: LookOptions) =>
    perform("look", options, () => look(frame, options)),
  );
}

async function look(frame: string, options: LookOptions): Promise<Outcome<"look">> {
  const spectrograph = options.spectrograph === undefined ? undefined : await readSpectrograph(options.spectrograph);
  const report = await lookAt(frame, spectrograph, {
    bias: options.bias ?? [],
    flats: options.flat ?? [],
    ...(options.hdu === undefined ? {} : { hdu: options.hdu }),
  });
  return { json: lookJson(report), text: page(report) };
}

function lookJson(report: LookReport): JsonOf<"look"> {
  const { geometry } = report;
  return {
    frame: report.name,
    size: [report.axis1, report.axis2],
    bitpix: report.bitpix,
    kind: report.kind,
    kindFrom: report.kindFrom,
    exposureSeconds: report.exposureSeconds,
    dispersionAxis: geometry?.dispersionAxis ?? null,
    dispersionAxisSeen: report.dispersionAxisSeen,
    binning: geometry?.binning ?? null,
    saturationAdu: report.saturation ?? null,
    amplifiers: report.amplifiers.map((amplifier, i) => ({
      amplifier: amplifier.amplifier,
      data: geometry?.data[i] ?? null,
      place: geometry?.place[i] ?? null,
      givenGain: amplifier.givenGain,
      givenReadNoise: amplifier.givenReadNoise,
      gain: amplifier.gain ?? null,
      readNoise: amplifier.readNoise ?? null,
      readNoiseAdu: amplifier.readNoiseAdu ?? null,
      readNoiseFrom: amplifier.readNoiseFrom ?? null,
    })),
    seams: report.seams.map(({ before, after, axis, at, step }) => ({ before, after, axis, at: at + 1, step })),
    levelUnit: report.levelUnit,
    levels: report.levels ?? null,
    ribbons: report.ribbons ?? null,
    assumptions: report.assumptions,
    warnings: report.warnings,
  };
}

function page(report: LookReport): string {
  const { geometry, levels, ribbons } = report;
  const unit = report.levelUnit === "electron" ? "e⁻" : "ADU above zero";
  const facts: [string, string][] = [
    ["image", `${report.axis1} × ${report.axis2} pixels, BITPIX ${report.bitpix}`],
    ["kind", report.kindFrom === "" ? report.kind : `${report.kind} (${report.kindFrom})`],
    ["exposure", report.exposureSeconds === null ? "the header does not say" : `${report.exposureSeconds} s`],
  ];
  if (geometry) facts.push(["dispersion", dispersion(report)]);
  if (geometry) facts.push(["binning", `${geometry.binning[0]} × ${geometry.binning[1]}`]);
  if (report.saturation !== undefined) facts.push(["saturation", `${report.saturation} ADU`]);
  if (levels) {
    facts.push([
      "levels",
      `1 % below ${fixed(levels.p1, 1)}, median ${fixed(levels.median, 1)}, 99 % below ${fixed(levels.p99, 1)} ${unit}`,
    ]);
    facts.push(["saturated", percentage(levels.saturatedShare)], ["without value", percentage(levels.missingShare)]);
  }
  if (ribbons) facts.push(["ribbons", ribbonsText(ribbons)]);
  for (const { before, after, step } of report.seams) {
    const percent = (value: number) => fixed(100 * value, 2);
    facts.push([
      `seam ${before}|${after}`,
      `amplifier ${after} shows ${percent(step.value)} ± ${percent(step.error)} % more light`,
    ]);
  }
  return [report.name, textPairs(facts), ...amplifierLines(report)].join("\n");
}

function dispersion({ geometry, dispersionAxisSeen }: LookReport): string {
  const seen =
    dispersionAxisSeen === null ? "the picture does not show it" : `the ribbons run along axis ${dispersionAxisSeen}`;
  return `taken to run along axis ${geometry!.dispersionAxis}; ${seen}`;
}

function ribbonsText({ count, pitch, irregularity }: NonNullable<LookReport["ribbons"]>): string {
  if (count < 2) return count === 0 ? "none in a cut across dispersion" : "1 in a cut across dispersion";
  const regular = irregularity < 0.25 ? "regular" : "irregular";
  return `${count} in a cut across dispersion, ${regular}, ${fixed(pitch, 2)} px apart`;
}

function amplifierLines({ amplifiers, geometry }: LookReport): string[] {
  if (amplifiers.length === 0) return [];
  const heading = ["amplifier", "pixels", "gain e⁻/ADU", "measured", "read noise e⁻", "measured", "from"];
  const rows = amplifiers.map((amplifier, i) => [
    String(amplifier.amplifier),
    geometry?.data[i] ?? "–",
    fixed(amplifier.givenGain, 3),
    withError(amplifier.gain),
    fixed(amplifier.givenReadNoise, 2),
    withError(amplifier.readNoise),
    amplifier.readNoiseFrom ?? "–",
  ]);
  return [counted(amplifiers.length, "amplifier"), textTable([heading, ...rows])];
}

function withError(measured: AmplifierNoise["gain"]): string {
  return measured === undefined ? "–" : `${fixed(measured.value, 3)} ± ${fixed(measured.error, 3)}`;
}
