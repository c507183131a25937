/** The demo's figures for people, and what they mean in plain words. */
import type { JsonOf } from "./json.js";
import { fixed, percentage, textPairs, textTable } from "./textTable.js";

type DemoJson = JsonOf<"demo">;
type Run = DemoJson["runs"][number];

export function demoPage(json: DemoJson, tracing: [string, string][]): string {
  const { offset, rms, worstRms, worstFibre, nMisnamed } = json.traceAgainstTruth;
  const truth = `rms ${fixed(rms, 4)} px, worst ${fixed(worstRms, 4)} px in fibre ${worstFibre}, after a common offset of ${fixed(offset, 4)} px; ${nMisnamed === 0 ? "no fibre" : nMisnamed} named wrongly`;
  const still = json.runs.filter((run) => run.shiftPixels === 0);
  const moved = json.runs.filter((run) => run.shiftPixels !== 0);
  return [
    `Simulated frames, tramlines and spectra are in ${json.folder}.`,
    "",
    textPairs([...tracing, ["trace against truth", truth]]),
    "",
    "Spectra against the truth: median bias, and the scatter of (flux − truth) / σ, which is 1 when error bars are true",
    decadeTable(json.runs),
    "",
    `Shift that was measured and applied; light of neighbours over ${still[0].leak.contrast} times brighter that ends up in a fibre; cosmic rays`,
    outcomeTable(json.runs),
    "",
    closingWords(still, moved, json.tracing.profile.kind),
  ].join("\n");
}

function decadeTable(runs: Run[]): string {
  const decades = decadesOf(runs[0]);
  const heading = ["true e⁻/column", "points", ...runs.map(runName)];
  const rows = decades.map(({ from, to, nPoint }) => [
    `${power(from)} – ${power(to)}`,
    String(nPoint),
    ...runs.map((run) => {
      const score = run.decades.find((one) => one.from === from);
      return score === undefined ? "–" : `${signedPercent(score.bias)} ± ${fixed(score.pull, 2)} σ`;
    }),
  ]);
  return textTable([heading, ...rows]);
}

function outcomeTable(runs: Run[]): string {
  const heading = [
    "method",
    "shift px",
    "mean leak",
    "worst",
    "hits",
    "found",
    "spoilt unflagged",
    "clean points flagged",
  ];
  return textTable([
    heading,
    ...runs.map(({ leak, cosmicRays, ...run }) => [
      runName({ leak, cosmicRays, ...run }),
      fixed(run.measuredShiftPixels, 4),
      percentage(leak.meanShare, 2),
      percentage(leak.worstShare, 2),
      String(cosmicRays.nHit),
      percentage(cosmicRays.foundShare),
      percentage(cosmicRays.spoiltShare),
      percentage(cosmicRays.falseShare, 2),
    ]),
  ]);
}

function runName({ method, crosstalkCorrected, shiftPixels }: Run): string {
  const name = method === "joint" || crosstalkCorrected ? method : `${method}, uncorrected`;
  return shiftPixels === 0 ? name : `${name}, moved ${shiftPixels} px`;
}

/** Error bars within a quarter, fluxes within 2 %. */
const TRUE_PULL = 1.25;
const TRUE_BIAS = 0.02;

/** What someone should take home, from the numbers alone: nothing is said that they do not bear out. */
function closingWords(still: Run[], moved: Run[], profile: string): string {
  const [joint, sum] = [still[0], still[still.length - 1]];
  const faint = decadesOf(joint)[0];
  const faintSum = decadesOf(sum).find(({ from }) => from === faint.from);
  const words = [
    `In plain words: joint extraction's error bars are ${errorBarWords(joint)}.`,
    `Spectra of ${power(faint.from)} – ${power(faint.to)} e⁻ are off by ${signedPercent(faint.bias)} in the median, those of a plain sum by ${signedPercent(faintSum?.bias)}.`,
    ...moved.map(
      (run) => `On light that moved by ${run.shiftPixels} px after the flat they are ${errorBarWords(run)}.`,
    ),
  ];
  const isTrue = decadesOf(joint).every(
    ({ pull, bias }) => number(pull) < TRUE_PULL && Math.abs(number(bias)) < TRUE_BIAS,
  );
  if (!isTrue) {
    const name = profile === "gaussian" ? "fitted Gaussian" : "measured profile";
    words.push(
      `The ${name} is not quite the light's own profile: check faint fibres beside bright ones before you trust them.`,
    );
  }
  return words.join("\n");
}

function errorBarWords(run: Run): string {
  const pulls = decadesOf(run).map(({ pull }) => number(pull));
  const [least, most] = [Math.min(...pulls), Math.max(...pulls)];
  if (most < TRUE_PULL && least > 1 / TRUE_PULL) return "true within a quarter at every level of light";
  return `not true: the scatter about the truth is ${fixed(least, 1)} to ${fixed(most, 1)} times what they say, by the level of light`;
}

function decadesOf(run: Run): Run["decades"] {
  return run.decades.filter(({ from }) => from >= 10);
}

function number(value: number | null): number {
  return value ?? Number.NaN;
}

function power(value: number): string {
  return value < 1000 ? String(value) : `1e${Math.round(Math.log10(value))}`;
}

function signedPercent(share: number | null | undefined): string {
  if (share === null || share === undefined || !Number.isFinite(share)) return "–";
  const percent = 100 * share;
  return `${percent >= 0 ? "+" : "−"}${Math.abs(percent).toFixed(Math.abs(percent) < 10 ? 1 : 0)} %`;
}
