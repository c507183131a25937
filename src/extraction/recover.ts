/** Recovery test: can the extraction of this very frame be trusted? Light of known flux is put on the frame, the frame is
 * extracted again, and what comes back is compared with what was put in. No truth of the frame itself is needed.
 *
 * - The light is pixels of a fibre flat that the profiles were not made from, and its flux is a plain sum over those pixels
 *   (flatLight.ts): a profile of a wrong width or without wings fails.
 * - All fibres get light at once, scaled alike: one fibre's pixels cannot be cut out of a flat without a model of its
 *   neighbours, which would be the profile under test. So the injection shows bias and error bars at each level beside the frame's own
 *   bright fibres; leaked light is seen at dark positions (dark.ts), where the right answer is nothing.
 * - The flat is moved to where the science frame's light sits by the shift that the extraction itself measures (move.ts):
 *   a wrongly measured shift is not seen here.
 * - Errors that a flat and the profile made of its like have in common (wings taken for scattered light in even illumination)
 *   are seen only in gaps and at slit ends.
 * - Read noise and gain that are wrong show in the frame's own dark positions only: elsewhere the frame's noise cancels. */
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import { median } from "../reference/median.js";
import { checkGeometry } from "../tramlines/file.js";
import { combineFlats } from "../tramlines/flat.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import { type Extraction, extractFrame } from "./extract.js";
import type { ExtractionOptions } from "./options.js";
import { planExtraction } from "./plan.js";
import { type WidenedTramlines, widenTramlines, withoutBackground } from "./recover/dark.js";
import { type DarkScore, injectedLight, ownLight, scoreDark } from "./recover/darkScore.js";
import { type FlatLight, measureFlatLight } from "./recover/flatLight.js";
import { injectLight, type MovedLight, makePatterns, type Pattern } from "./recover/inject.js";
import { ProfileLight } from "./recover/light.js";
import { flatLines, movementOf, moveToFrame } from "./recover/move.js";
import { type CellScore, type FibreBias, type PatternScore, scorePattern } from "./recover/score.js";
import { judge, type Verdict } from "./recover/verdict.js";
import { planZones, slitPlaces, type ZonePlan } from "./recover/zones.js";

export type { DarkScore } from "./recover/darkScore.js";
export type { CellScore, FibreBias } from "./recover/score.js";
export type { Finding, Verdict } from "./recover/verdict.js";

export interface RecoveryOptions extends ExtractionOptions {
  /** Of the noise of the injected light. Default 1. */
  seed?: number;
}

export interface Recovery {
  verdict: Verdict;
  /** By level and place. */
  cells: CellScore[];
  dark: DarkScore[];
  /** The fibre whose injected light comes back worst, at the highest level; null when nothing was injected. */
  worstFibre: FibreBias | null;
  /** e⁻ per column: median of what the flat's fibres are known to hold. */
  flatElectrons: number;
  /** Pixels of the flat that were replaced: bad, or hit by a cosmic ray. */
  flawedPixels: number;
  /** px: how far the flat's light was moved, at most; 0 when its pixels were taken as they are. */
  movedPixels: number;
  seed: number;
  warnings: string[];
}

interface Injection {
  frame: Frame;
  /** The frame's own: moved to its light, and refined on it, without the injection. */
  tramlines: Tramlines;
  options: ExtractionOptions;
  zones: ZonePlan;
  flat: FlatLight;
  moved: MovedLight;
  seed: number;
}

/** Puts light of `flats`, which `tramlines` must not have been made from, on `frame` and extracts it again, once for each level
 * from 10 to 1e5 e⁻ per column that the flats allow.
 * @throws RangeError when frame, flats and tramlines come from different readout windows, or there is no gap between fibres. */
export async function recoverInjected(
  frame: Frame,
  tramlines: Tramlines,
  flats: Frame[],
  options: RecoveryOptions = {},
): Promise<Recovery> {
  const { seed = 1, onProgress, ...extraction } = options;
  for (const one of [frame, ...flats]) checkGeometry(one, tramlines);
  const kernels = await loadKernels();
  const adapted = adaptTramlines(kernels, frame, tramlines, extraction);
  const plan = planExtraction(adapted.tramlines);
  const combined = combineFlats(flats);
  const movement = movementOf(kernels, combined, tramlines, adapted.shift);
  const lines = flatLines(adapted.tramlines, movement);
  const zones = planZones(lines, plan.active);
  const flat = measureFlatLight(combined, zones, new ProfileLight(lines, plan));
  const moved = moveToFrame(flat, combined.nUsed, movement, adapted.tramlines, plan);
  const fixed = { ...extraction, shift: false, refine: false };
  const injection: Injection = { frame, tramlines: adapted.tramlines, options: fixed, zones, flat, moved, seed };
  const without = await extractFrame(frame, adapted.tramlines, fixed);

  const flatElectrons = median(flat.known.filter((light) => light > 0));
  const { patterns, left } = makePatterns(flatElectrons, frame.nx);
  const step = 1 / (patterns.length + 2);
  const scores: PatternScore[] = [];
  let last: Added | null = null;
  for (const [i, pattern] of patterns.entries()) {
    onProgress?.((i + 1) * step);
    last = await extractAdded(injection, pattern);
    scores.push(scoreAdded(injection, last, without));
  }
  onProgress?.(1 - step);
  const dark = await measureDark(injection, last, without);
  onProgress?.(1);
  const cells = scores.flatMap((score) => score.cells).filter(({ nPoint }) => nPoint > 0);
  const worstFibre = findWorst(scores.at(-1), zones);
  return {
    verdict: judge(cells, dark, worstFibre),
    ...{ cells, dark, worstFibre, flatElectrons, flawedPixels: flat.nFlaw, movedPixels: movement?.largest ?? 0, seed },
    warnings: [...adapted.warnings, ...without.warnings, ...left],
  };
}

interface Added {
  pattern: Pattern;
  frame: Frame;
  extraction: Extraction;
}

async function extractAdded(
  { frame, tramlines, options, zones, moved, seed }: Injection,
  pattern: Pattern,
): Promise<Added> {
  const sum = injectLight(frame, moved, pattern, zones, seed);
  return { pattern, frame: sum, extraction: await extractFrame(sum, tramlines, options) };
}

function scoreAdded({ zones, flat }: Injection, { pattern, extraction }: Added, without: Extraction): PatternScore {
  return scorePattern({
    without: without.spectra,
    added: extraction.spectra,
    rows: zones.active,
    slit: slitPlaces(zones),
    known: flat.known,
    pattern,
  });
}

/** Dark positions with the frame's own light and with the brightest injection. The background is the one seen without them. */
async function measureDark(injection: Injection, brightest: Added | null, without: Extraction): Promise<DarkScore[]> {
  const { frame, options, zones, flat } = injection;
  const widened = widenTramlines({ ...zones, tramlines: injection.tramlines });
  if (widened.dark.length === 0) return [];
  const own = await extractDark(frame, without, widened, options);
  const scores = scoreDark("own", ownLight(own.spectra, widened.rows), widened);
  if (brightest === null) return scores;
  const { pattern } = brightest;
  const added = await extractDark(brightest.frame, brightest.extraction, widened, options);
  const light = (k: number, x: number) => (pattern.continuum + pattern.line[x]) * flat.known[k * frame.nx + x];
  return [...scoreDark("injected", injectedLight(own.spectra, added.spectra, light), widened), ...scores];
}

function extractDark(
  frame: Frame,
  plain: Extraction,
  widened: WidenedTramlines,
  options: ExtractionOptions,
): Promise<Extraction> {
  const clear = withoutBackground(frame, plain.background);
  return extractFrame(clear, widened.tramlines, { ...options, background: false });
}

function findWorst(score: PatternScore | undefined, zones: ZonePlan): FibreBias | null {
  if (score === undefined) return null;
  let worst: FibreBias | null = null;
  score.fibres.forEach(({ bias, error }, k) => {
    if (Number.isNaN(bias) || Math.abs(bias) <= Math.abs(worst?.bias ?? 0)) return;
    worst = { fibre: zones.tramlines.fibre[zones.active[k]], bias, error };
  });
  return worst;
}
