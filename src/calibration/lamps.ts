/** Lines that an arc may show: of lamps by name, or of the observer's own list (lineFile.ts). */
import { nearestKey } from "../nearestKey.js";
import { CalibrationError } from "./errors.js";
import { LAMP_TABLES, type Lamp, tableLines } from "./lampTables.js";
import type { Medium } from "./medium.js";
import { airToVacuum, vacuumToAir } from "./refraction.js";

/** Lines in rising order of wavelength, a row each. */
export interface LineList {
  /** Å in `medium`. */
  wavelength: Float64Array;
  medium: Medium;
  /** Relative to other lines of the same lamp, roughly; NaN where unknown. */
  strength: Float64Array;
  /** "Ne", or what the observer's list calls it; "" where unknown. */
  lamp: string[];
  /** Where the values come from. */
  source: string;
}

export const KNOWN_LAMPS = Object.keys(LAMP_TABLES) as Lamp[];

/** Lines of the lamps named ("Ne", "NeI", "ne i" and "neon" are one). `range`: Å in `medium`, in either order; all by default.
 * @throws CalibrationError for a lamp that there is no list of. */
export function lampLines(
  names: readonly string[],
  range?: readonly [number, number],
  medium: Medium = "air",
): LineList {
  const lamps = [...new Set(names.map(lampNamed))];
  const lists = lamps.map((lamp) => {
    const lines = tableLines(lamp);
    return {
      wavelength: Float64Array.from(lines, (line) => line.wavelength),
      medium: "air" as const,
      strength: Float64Array.from(lines, (line) => line.strength),
      lamp: lines.map(() => lamp),
      source: LAMP_TABLES[lamp].source,
    };
  });
  return joinLines(lists, medium, range);
}

/** Several lists as one, in `medium`, cut to `range` (Å in `medium`). A line that two lists have within 0.02 Å, by the same lamp's
 * name or by none, is taken from the later list: an observer's own values come last. */
export function joinLines(
  lists: readonly LineList[],
  medium: Medium,
  range: readonly [number, number] = [0, Number.POSITIVE_INFINITY],
): LineList {
  const [low, high] = range[0] < range[1] ? range : [range[1], range[0]];
  const rows = lists.flatMap((list, order) =>
    Array.from(list.wavelength, (wavelength, i) => ({
      wavelength: inMedium(wavelength, list.medium, medium),
      strength: list.strength[i],
      lamp: list.lamp[i],
      order,
    })),
  );
  const sorted = rows
    .filter(({ wavelength }) => wavelength >= low && wavelength <= high)
    .sort((a, b) => a.wavelength - b.wavelength || a.order - b.order);
  const isSame = (a: (typeof rows)[0], b: (typeof rows)[0]) =>
    a.order !== b.order &&
    Math.abs(a.wavelength - b.wavelength) < SAME_LINE &&
    (a.lamp === b.lamp || a.lamp === "" || b.lamp === "");
  const kept = sorted.filter(
    (row, i) => !nearby(sorted, i).some((other) => other.order > row.order && isSame(row, other)),
  );
  return {
    wavelength: Float64Array.from(kept, (row) => row.wavelength),
    medium,
    strength: Float64Array.from(kept, (row) => row.strength),
    lamp: kept.map((row) => row.lamp),
    source: [...new Set(lists.map(({ source }) => source))].join("; "),
  };
}

/** Å: two lists' values of one line. */
const SAME_LINE = 0.02;
/** A companion below this share of a line's strength moves the middle of both by less than 1/50 of their distance. */
const NEGLIGIBLE = 0.02;

function nearby<T>(rows: T[], i: number): T[] {
  return rows.slice(Math.max(0, i - 3), i + 4).filter((row) => row !== rows[i]);
}

/** Lines that an instrument cannot tell from a neighbour: 1 where another line lies within `separation` Å that is not negligible beside
 * it, 0 elsewhere. Neither their peak's middle nor its absence says much: leave them out of a fit. Strengths compare within a
 * lamp only: another lamp's line, or one of unknown strength, always counts. */
export function crowdedLines({ wavelength, strength, lamp }: LineList, separation: number): Uint8Array {
  return Uint8Array.from(wavelength, (here, i) => {
    for (const step of [-1, 1]) {
      for (let j = i + step; Math.abs(wavelength[j] - here) < separation; j += step) {
        const negligible = lamp[i] === lamp[j] && strength[j] < NEGLIGIBLE * strength[i];
        if (!negligible) return 1;
      }
    }
    return 0;
  });
}

function inMedium(wavelength: number, from: Medium, to: Medium): number {
  if (from === to) return wavelength;
  return to === "vacuum" ? airToVacuum(wavelength) : vacuumToAir(wavelength);
}

const FULL_NAMES: Record<string, Lamp> = {
  helium: "He",
  neon: "Ne",
  argon: "Ar",
  krypton: "Kr",
  xenon: "Xe",
  mercury: "Hg",
  copper: "Cu",
  cadmium: "Cd",
  zinc: "Zn",
};

/** "Ne", "NeI", "Ne I", "ne 1", "neon" → Ne.
 * @throws CalibrationError with what is known. */
export function lampNamed(name: string): Lamp {
  const plain = name.trim().toLowerCase();
  const element = plain.replace(/[\s_-]*(i|1)$/, "");
  const found = KNOWN_LAMPS.find((lamp) => [plain, element].includes(lamp.toLowerCase())) ?? FULL_NAMES[plain];
  if (found) return found;
  const near = nearestKey(plain, Object.keys(FULL_NAMES));
  const hint = near && plain.length > 3 ? `did you mean ${FULL_NAMES[near]}? ` : "";
  throw new CalibrationError(
    `There is no line list for a lamp called '${name}'; ${hint}known: ${KNOWN_LAMPS.join(", ")} (neutral atoms); for others name a list of your own as 'lines' under [wavelength] of the spectrograph file.`,
  );
}
