/** By how much unresolved companions may pull a line's middle.
 *
 * Two lines that lie d apart and are not resolved have their common middle at d · e₂/(e₁ + e₂) from the first. What each line brings is
 * its listed strength times its lamp's brightness, taken from the lines of that lamp that stand alone and were seen; of a lamp of which
 * none was seen, at most what the faintest peak has. Listed strengths are rough: a companion counts `DOUBT` times. */
import { medianOf } from "../detector/clip.js";
import type { LineList } from "./lamps.js";

export interface SeenLine {
  /** Index in the list. */
  line: number;
  /** e⁻, or anything proportional. */
  electrons: number;
}

const DOUBT = 3;

/** Å, a value a line of the list: 0 for one that stands alone; at most its companions' distance; that distance where a brightness is
 * unknown.
 * @param range Å at the ends of the frame, in either order. @param separation Å, from where on two lines are two peaks. */
export function blendPulls(
  list: LineList,
  seen: readonly SeenLine[],
  range: readonly [number, number],
  faintest: number,
  separation: number,
): Float64Array {
  const { wavelength, strength, lamp } = list;
  const alone = Uint8Array.from(wavelength, (_, i) => (companions(wavelength, i, separation).length === 0 ? 1 : 0));
  const brightness = lampBrightness(list, seen, range, faintest, alone);
  const light = (i: number) => strength[i] * (brightness.get(lamp[i]) ?? Number.NaN);
  return wavelength.map((here, i) =>
    companions(wavelength, i, separation).reduce((pull, j) => {
      const share = (DOUBT * light(j)) / (light(i) + DOUBT * light(j));
      return pull + Math.abs(wavelength[j] - here) * (Number.isNaN(share) ? 1 : share);
    }, 0),
  );
}

function companions(wavelength: Float64Array, i: number, separation: number): number[] {
  const near: number[] = [];
  for (const step of [-1, 1]) {
    for (let j = i + step; Math.abs(wavelength[j] - wavelength[i]) < separation; j += step) near.push(j);
  }
  return near;
}

/** Electrons a unit of strength, by lamp. */
function lampBrightness(
  { wavelength, strength, lamp }: LineList,
  seen: readonly SeenLine[],
  [a, b]: readonly [number, number],
  faintest: number,
  alone: Uint8Array,
): Map<string, number> {
  const [low, high] = a < b ? [a, b] : [b, a];
  const brightness = new Map<string, number>();
  const seenLines = new Set(seen.map(({ line }) => line));
  for (const name of new Set(lamp)) {
    const lone = seen.filter(({ line }) => lamp[line] === name && alone[line] === 1 && strength[line] > 0);
    if (lone.length > 0) {
      brightness.set(name, medianOf(lone.map(({ line, electrons }) => electrons / strength[line])));
      continue;
    }
    const unseen = lamp.flatMap((other, i) =>
      other === name && alone[i] === 1 && !seenLines.has(i) && wavelength[i] > low && wavelength[i] < high
        ? [strength[i]]
        : [],
    );
    if (unseen.length > 0) brightness.set(name, faintest / Math.max(...unseen));
  }
  return brightness;
}
