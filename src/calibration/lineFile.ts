/** The observer's own list of arc lines, named as `lines` under [wavelength] of the spectrograph file. Text, one line a row:
 *
 *     medium air               # or vacuum; must come first
 *     5852.488  55  Ne         # wavelength in Å, and where known strength and lamp
 *     5881.895, 25, Ne         # commas, semicolons and tabs part as blanks do
 *     5944.834                 # a strength that is unknown may be left out, or be "-"
 *
 * Strengths compare within a lamp. The medium is asked for because a list read in the wrong one is off by 1.4 Å at 5000 and 2.2 Å at
 * 8000 Å, which a fit takes for a zero point and nobody sees. */
import { readFile } from "node:fs/promises";
import { basename } from "node:path";
import { CalibrationError } from "./errors.js";
import type { LineList } from "./lamps.js";
import type { Medium } from "./medium.js";

const FEWEST = 2;
const FROM = 2000;
const TO = 25000;

/** @throws CalibrationError naming file, line, what was found and what was expected. */
export async function readLineFile(path: string): Promise<LineList> {
  let text: string;
  try {
    text = await readFile(path, "utf8");
  } catch (error) {
    const reason = (error as NodeJS.ErrnoException).code === "ENOENT" ? "there is no such file" : "it cannot be read";
    throw new CalibrationError(`${path}: ${reason}, but a list of arc lines was expected; check 'wavelength.lines'.`);
  }
  return parseLineFile(text, basename(path));
}

interface Row {
  wavelength: number;
  strength: number;
  lamp: string;
  place: string;
}

/** The same from the text itself; `file` is what messages call it. */
export function parseLineFile(text: string, file: string): LineList {
  let medium: Medium | undefined;
  const rows: Row[] = [];
  for (const [i, raw] of text
    .replace(/^\uFEFF/, "")
    .split(/\r\n|\n|\r/)
    .entries()) {
    const words = raw
      .replace(/#.*/, "")
      .trim()
      .split(/[\s,;]+/)
      .filter((word) => word !== "");
    if (words.length === 0) continue;
    const place = `${file}, line ${i + 1}`;
    if (words[0].toLowerCase().replace(/[:=]$/, "") === "medium") {
      if (medium !== undefined)
        throw new CalibrationError(`${place}: the medium is given twice; keep one of the two lines.`);
      medium = mediumOf(words[1], place);
    } else {
      if (medium === undefined) {
        throw new CalibrationError(
          `${place}: wavelengths begin before a line says 'medium air' or 'medium vacuum', which differ by over an ångström; put that line first.`,
        );
      }
      rows.push(rowOf(words, place));
    }
  }
  if (medium === undefined || rows.length < FEWEST) {
    throw new CalibrationError(
      `${file}: holds ${rows.length} lines, but a line 'medium air' or 'medium vacuum' and at least ${FEWEST} wavelengths in Å were expected; add them.`,
    );
  }
  return listOf(rows, medium, file);
}

function mediumOf(word: string | undefined, place: string): Medium {
  const medium = word?.toLowerCase();
  if (medium === "air" || medium === "vacuum") return medium;
  throw new CalibrationError(
    `${place}: the medium is ${quoted(word)}, but 'air' or 'vacuum' was expected; correct it.`,
  );
}

function rowOf(words: string[], place: string): Row {
  const wavelength = numberOf(words[0]);
  if (!(wavelength >= FROM && wavelength <= TO)) {
    const remedy =
      wavelength >= FROM / 10 && wavelength <= TO / 10 ? "is it in nm? Write it in Å." : "correct that line.";
    throw new CalibrationError(
      `${place}: found ${quoted(words[0])} where a wavelength from ${FROM} to ${TO} Å was expected; ${remedy}`,
    );
  }
  const strength = words[1] === undefined || words[1] === "-" ? Number.NaN : numberOf(words[1]);
  if (words[1] !== undefined && words[1] !== "-" && !(strength > 0)) {
    throw new CalibrationError(
      `${place}: found ${quoted(words[1])} where a strength over 0 was expected; correct it, or write '-' where it is not known.`,
    );
  }
  return { wavelength, strength, lamp: words.slice(2).join(" "), place };
}

/** Plain decimal numbers only: "5852.488", "1e3"; never hexadecimal or Infinity. */
function numberOf(word: string): number {
  return /^[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?$/i.test(word) ? Number(word) : Number.NaN;
}

function listOf(rows: Row[], medium: Medium, file: string): LineList {
  const sorted = [...rows].sort((a, b) => a.wavelength - b.wavelength);
  const twice = sorted.find((row, i) => i > 0 && row.wavelength === sorted[i - 1].wavelength);
  if (twice) {
    throw new CalibrationError(
      `${twice.place}: ${twice.wavelength} Å is listed twice; leave one of the two lines out.`,
    );
  }
  return {
    wavelength: Float64Array.from(sorted, (row) => row.wavelength),
    medium,
    strength: Float64Array.from(sorted, (row) => row.strength),
    lamp: sorted.map((row) => row.lamp),
    source: file,
  };
}

function quoted(word: string | undefined): string {
  return word === undefined ? "missing" : `'${word}'`;
}
