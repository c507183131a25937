/** What an observer should know of a wavelength scale before trusting it. */
import type { ArcExposure, ArcResult } from "./arc.js";

/** Columns: an rms from which on the scale is poor, and a movement between arcs that a night should not have. */
const poorRms = 0.1;
const farOffset = 0.5;
/** A fibre whose rms is this many times the typical one. */
const oddTimes = 3;
const fewLines = 8;
/** Share of the columns beyond the outermost lines that goes without saying. */
const bareShare = 0.1;

export function arcWarnings(
  { solution, fit, lines, list, identification }: Omit<ArcResult, "warnings">,
  exposures: readonly ArcExposure[],
  range: readonly [number, number],
): string[] {
  const name = exposures.map((one) => one.name).join(", ");
  const say = (sentence: string | false): string[] => (sentence === false ? [] : [`${name}: ${sentence}`]);
  const nLine = new Set(lines.filter(({ used }) => used).map(({ line }) => line)).size;
  const rms = rmsOf(lines);
  const odd = [...solution.rms.keys()].filter((k) => solution.rms[k] > Math.max(oddTimes * rms, poorRms / 2));
  const seen = [...solution.nLine.keys()].filter((k) => solution.nLine[k] > 0);
  const [from, to] = [
    Math.min(...seen.map((k) => solution.seenFrom[k])),
    Math.max(...seen.map((k) => solution.seenTo[k])),
  ];
  const bare = Math.max(from, solution.nx - 1 - to) > bareShare * solution.nx;
  return [
    ...identification.warnings.map((sentence) => `${name}: ${sentence}`),
    ...say(
      identification.reversed &&
        `wavelength ${range[0] < range[1] ? "falls" : "rises"} with the column, the other way round than the range ${range[0]} to ${range[1]} Å says; correct 'range' under [wavelength].`,
    ),
    ...say(
      nLine < fewLines &&
        `only ${nLine} lines carry the wavelength scale; it may be wrong between them by more than its rms says; use more lamps or longer exposures.`,
    ),
    ...say(
      bare &&
        `no line beyond columns ${Math.round(from) + 1} to ${Math.round(to) + 1} of ${solution.nx}: wavelengths out there are extrapolated; more lamps would help.`,
    ),
    ...say(rms > poorRms && `the lines scatter by ${rms.toFixed(3)} px about the wavelength scale; 0.05 px is usual.`),
    ...say(
      fit.filled.length > 0 &&
        `fibre${fit.filled.length > 1 ? "s" : ""} ${fit.filled.map((k) => k + 1).join(", ")} had too few lines; their wavelengths come from their neighbours', and their own offset is unknown.`,
    ),
    ...say(odd.length > 0 && `lines scatter much more than elsewhere in fibres ${odd.map((k) => k + 1).join(", ")}.`),
    ...fit.dropped.map(
      ({ line, off, nFibre }) =>
        `${name}: ${list.lamp[line]} ${list.wavelength[line].toFixed(3)} Å was seen at ${off > 0 ? "+" : "−"}${Math.abs(off).toFixed(3)} Å in ${nFibre} fibres alike, and is left out: another line, a blend, or a wrong wavelength in the list.`,
    ),
    ...exposures.flatMap((one, i) =>
      Math.abs(fit.exposure[i]) > farOffset
        ? [
            `${one.name}: its lines lie ${fit.exposure[i].toFixed(2)} px from those of ${exposures[0].name}, which defines the zero; the spectrograph moved, so check frames taken between them.`,
          ]
        : [],
    ),
  ];
}

/** Columns, of all points in use. */
export function rmsOf(lines: ArcResult["lines"]): number {
  const used = lines.filter((one) => one.used);
  return Math.sqrt(used.reduce((sum, { residual }) => sum + residual * residual, 0) / used.length);
}
