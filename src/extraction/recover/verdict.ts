/** What the numbers of a recovery test come to, in plain words.
 *
 * The limits are choices, not published ones, save that leaked light under 1 % is what crowded fibre spectrographs aim at (common
 * practice). A bias counts when it is beyond its limit and beyond
 * three of its standard errors. */
import type { DarkScore } from "./darkScore.js";
import type { CellScore, FibreBias } from "./score.js";

export type Grade = "good" | "doubtful" | "bad";

export interface Finding {
  about: "flux" | "error bars" | "leaked light" | "emission lines" | "dark positions";
  grade: Grade;
  sentence: string;
}

export interface Verdict {
  grade: Grade;
  /** One sentence. */
  sentence: string;
  findings: Finding[];
}

/** Up to the first: good; beyond the second: bad. */
export const limits = {
  bias: [0.01, 0.03],
  fibreBias: [0.005, 0.03],
  pull: [1.2, 2],
  /** Mean over the positions, and the worst of them. */
  leak: [0.001, 0.005],
  worstLeak: [0.003, 0.01],
  lineFlagged: [0.01, 0.05],
  lineClipped: [0.001, 0.01],
  darkPull: [1.5, 3],
} as const;

/** Error bars this much too large are no good either. */
const timidPull = 0.8;
/** Points and lines from which on a share or a scatter says something. */
const tellingPoints = 200;
const tellingLines = 30;
const significance = 3;

export function judge(cells: CellScore[], leak: DarkScore[], worstFibre: FibreBias | null): Verdict {
  const findings = [
    ...judgeFlux(cells, worstFibre),
    ...judgeErrors(cells),
    ...judgeLeak(leak),
    ...judgeLines(cells),
    ...judgeDark(leak),
  ];
  const grade = findings.reduce<Grade>((worst, one) => (order(one.grade) > order(worst) ? one.grade : worst), "good");
  const told = findings.some(({ about }) => about === "flux");
  return { grade: told ? grade : worse(grade, "doubtful"), sentence: summary(grade, told, findings), findings };
}

function summary(grade: Grade, told: boolean, findings: Finding[]): string {
  const wrong = findings.filter((one) => one.grade === grade).map(({ about }) => about);
  if (!told) return "Too little light could be injected to tell whether the extraction can be trusted on this frame.";
  if (grade === "good") return "The extraction can be trusted on this frame, to within the numbers below.";
  const what = [...new Set(wrong)].join(", ");
  if (grade === "doubtful") return `The extraction of this frame is to be used with care: ${what}.`;
  return `Do not trust the extraction of this frame: ${what}.`;
}

function judgeFlux(cells: CellScore[], worstFibre: FibreBias | null): Finding[] {
  const telling = cells.filter(({ bias, biasError }) => Number.isFinite(bias) && Number.isFinite(biasError));
  if (telling.length === 0) return [];
  const sure = (cell: CellScore) => significant(cell, limits.bias);
  const worst = telling.reduce((a, b) => (sure(b) > sure(a) ? b : a));
  const grade = gradeOf(sure(worst), limits.bias);
  const best = telling.reduce((a, b) => (b.biasError < a.biasError ? b : a));
  const findings: Finding[] = [
    {
      about: "flux",
      grade,
      sentence:
        grade === "good"
          ? `Injected light comes back to ${percent(best.bias)} ± ${percent(best.biasError)} (${levelOf(best)}), and is nowhere surely off by over ${percent(limits.bias[0])}.`
          : `Injected light comes back ${worst.bias > 0 ? "too bright" : "too faint"} by ${percent(Math.abs(worst.bias))} ± ${percent(worst.biasError)} (${levelOf(worst)}): the profiles are of a wrong width or miss light.`,
    },
  ];
  if (worstFibre !== null) {
    const error = { bias: worstFibre.bias, biasError: worstFibre.error };
    findings.push({
      about: "flux",
      grade: gradeOf(significant(error, limits.fibreBias), limits.fibreBias),
      sentence: `Fibre ${worstFibre.fibre} is the worst one at the highest level, off by ${percent(worstFibre.bias)} ± ${percent(worstFibre.error)}.`,
    });
  }
  return findings;
}

function judgeErrors(cells: CellScore[]): Finding[] {
  const telling = cells.filter(({ nPoint, pull }) => nPoint >= tellingPoints && Number.isFinite(pull));
  if (telling.length === 0) return [];
  const worst = telling.reduce((a, b) => (Math.abs(surePull(b) - 1) > Math.abs(surePull(a) - 1) ? b : a));
  const grade = surePull(worst) < timidPull ? "doubtful" : gradeOf(surePull(worst), limits.pull);
  const range = `${Math.min(...telling.map(({ pull }) => pull)).toFixed(2)} to ${Math.max(...telling.map(({ pull }) => pull)).toFixed(2)}`;
  const sentence =
    grade === "good"
      ? `Error bars of the added light are right: what comes back scatters by ${range} of them.`
      : `What comes back scatters by ${worst.pull.toFixed(2)} of its error bars (${levelOf(worst)}); they are too ${worst.pull > 1 ? "small" : "large"} there.`;
  return [{ about: "error bars", grade, sentence }];
}

function judgeLeak(leak: DarkScore[]): Finding[] {
  const injected = leak.filter(({ light }) => light === "injected");
  return injected.map(({ distance, nPosition, meanShare, meanError, worstShare, worstError, worstPosition }) => {
    const mean = gradeOf(significant({ bias: meanShare, biasError: meanError }, limits.leak), limits.leak);
    const worst = gradeOf(significant({ bias: worstShare, biasError: worstError }, limits.worstLeak), limits.worstLeak);
    const where = distance === 1 ? "beside a lit fibre" : "next but one to a lit fibre";
    return {
      about: "leaked light",
      grade: worse(mean, worst),
      sentence: `${nPosition} dark position${nPosition === 1 ? "" : "s"} ${where} ${nPosition === 1 ? "is" : "are"} given ${percent(meanShare)} of its light in the mean and ${percent(worstShare)} at worst (${worstPosition}).`,
    };
  });
}

function judgeLines(cells: CellScore[]): Finding[] {
  const total = cells.reduce((n, { nLine }) => n + nLine, 0);
  if (total < tellingLines) return [];
  const share = (of: (cell: CellScore) => number) =>
    cells.reduce((n, cell) => n + (cell.nLine > 0 ? cell.nLine * of(cell) : 0), 0) / total;
  const flagged = share((cell) => cell.lineFlaggedShare);
  const clipped = share((cell) => cell.lineClippedShare);
  const grade = worse(gradeOf(flagged, limits.lineFlagged), gradeOf(clipped, limits.lineClipped));
  return [
    {
      about: "emission lines",
      grade,
      sentence: `Of ${total} unresolved emission lines ${percent(flagged)} lose pixels as supposed cosmic rays, ${percent(clipped)} lose light.`,
    },
  ];
}

function judgeDark(leak: DarkScore[]): Finding[] {
  const own = leak.filter(({ light }) => light === "own");
  if (own.length === 0) return [];
  const worst = own.reduce((a, b) => (b.pull > a.pull ? b : a));
  const grade = gradeOf(worst.pull, limits.darkPull);
  const sentence =
    grade === "good"
      ? `In the frame itself dark positions hold nothing but noise: ${worst.pull.toFixed(2)} of their error bars.`
      : `In the frame itself dark positions ${worst.distance === 1 ? "beside" : "next but one to"} lit fibres stray from 0 by ${worst.pull.toFixed(2)} of their error bars: leaked or scattered light, or a wrong noise.`;
  return [{ about: "dark positions", grade, sentence }];
}

/** The scatter brought towards 1 by what chance may do in three of a thousand such samples; the robust scatter of n normal deviates
 * is itself uncertain by 1.17 / √n of it. */
function surePull({ pull, nPoint }: CellScore): number {
  const chance = (significance * 1.17) / Math.sqrt(nPoint);
  return pull > 1 ? Math.max(pull * (1 - chance), 1) : Math.min(pull * (1 + chance), 1);
}

/** The bias where it is beyond the first limit and surely none of chance, 0 where it is not. */
function significant(
  { bias, biasError }: { bias: number; biasError: number },
  [first]: readonly [number, number],
): number {
  return Math.abs(bias) > first && !(Math.abs(bias) <= significance * biasError) ? Math.abs(bias) : 0;
}

function gradeOf(value: number, [good, bad]: readonly [number, number]): Grade {
  return value <= good ? "good" : value <= bad ? "doubtful" : "bad";
}

function order(grade: Grade): number {
  return ["good", "doubtful", "bad"].indexOf(grade);
}

function worse(a: Grade, b: Grade): Grade {
  return order(a) > order(b) ? a : b;
}

function levelOf({ from, to, place }: CellScore): string {
  const where = place === "far" ? "no bright fibre near" : `${place} to a bright fibre`;
  return `${from} to ${to} e⁻ per column, ${where}`;
}

/** Two significant digits below 10 %. */
function percent(share: number): string {
  const value = 100 * share;
  if (!Number.isFinite(value)) return "an unknown share";
  const text =
    Math.abs(value) >= 10 || value === 0 ? value.toFixed(0) : value.toPrecision(Math.abs(value) >= 0.001 ? 2 : 1);
  return `${Number(text)} %`;
}
