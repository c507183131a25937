/** Header cards, 80 characters each, to values and back (FITS Standard 4.0, section 4).
 *
 *     KEYWORD = value / comment        columns 1-8 keyword, 9-10 "= ", from 11 value and comment
 *     HIERARCH a b c = value / comment
 *     KEYWORD = 'text goes on &'       then: CONTINUE  'here' / comment
 *     COMMENT text, HISTORY text, and blanks followed by text */
import { FitsError } from "./errors.js";
import type { Card, CardValue } from "./header.js";

export const CARD_BYTES = 80;
export const BLOCK_BYTES = 2880;

const COMMENTARY = new Set(["COMMENT", "HISTORY", ""]);
const VALUE =
  /^ *(?:'((?:[^']|'')*)'|\( *([^,()]*?) *, *([^,()]*?) *\)|([TF])(?=[ /]|$)|([-+]?\d+)(?=[ /]|$)|([-+]?(?:\d+\.?\d*|\.\d+)(?:[EDed][-+]?\d+)?)(?=[ /]|$))? *(?:\/ ?(.*))?$/;
const REAL = /^[-+]?(?:\d+\.?\d*|\.\d+)(?:[EDed][-+]?\d+)?$/;

/** The cards as they stood in the file, so that what is carried over is carried over to the letter. */
const originals = new WeakMap<Card, { text: string; card: Card }>();

export interface ParsedCards {
  cards: Card[];
  /** One sentence fragment for each card that could not be understood and was left out. */
  problems: string[];
}

/** Cards of `text`, a whole number of 80 characters without END. */
export function parseCards(text: string): ParsedCards {
  const cards: Card[] = [];
  const problems: string[] = [];
  for (let at = 0; at < text.length; at += CARD_BYTES) {
    const first = at;
    const card = parseCard(text.slice(at, at + CARD_BYTES));
    if (typeof card === "string") {
      problems.push(card);
      continue;
    }
    while (typeof card.value === "string" && card.value.endsWith("&")) {
      const more = parseContinuation(text.slice(at + CARD_BYTES, at + 2 * CARD_BYTES));
      if (more === undefined) break;
      card.value = (card.value.slice(0, -1) + more.value).trimEnd();
      if (more.comment !== "") card.comment = `${card.comment} ${more.comment}`.trim();
      at += CARD_BYTES;
    }
    cards.push(card);
    const original = text.slice(first, at + CARD_BYTES);
    if (/^[ -~]*$/.test(original)) originals.set(card, { text: original, card: { ...card } });
  }
  return { cards, problems };
}

/** One card without continuation; a string says what is wrong with it. */
export function parseCard(image: string): Card | string {
  const keyword = image.slice(0, 8).trimEnd();
  if (keyword === "HIERARCH" && image.slice(8).includes("=")) {
    const equals = image.indexOf("=");
    const words = image.slice(8, equals).trim().split(/ +/).join(" ").toUpperCase();
    if (words !== "") return withValue(words, image.slice(equals + 1));
  }
  if (!/^[A-Z0-9_-]*$/.test(keyword)) return `the keyword '${keyword}' holds characters other than A-Z, 0-9, _ and -`;
  if (keyword === "CONTINUE") return "a CONTINUE card follows no text that goes on";
  if (image.slice(8, 10) === "= " && !COMMENTARY.has(keyword)) return withValue(keyword, image.slice(10));
  return { keyword, comment: image.slice(8).trimEnd() };
}

function withValue(keyword: string, field: string): Card | string {
  const match = VALUE.exec(field.trimEnd());
  const unreadable = `${keyword} has a value that is not one of the FITS forms, "${field.trim()}"`;
  if (match === null) return unreadable;
  const [, text, real, imaginary, logical, integer, float, comment = ""] = match;
  let value: CardValue = null;
  if (text !== undefined) value = text.replaceAll("''", "'").trimEnd();
  else if (logical !== undefined) value = logical === "T";
  else if (integer !== undefined) value = wholeNumber(integer);
  else if (float !== undefined) value = realNumber(float);
  else if (real !== undefined && imaginary !== undefined) {
    if (!REAL.test(real) || !REAL.test(imaginary)) return unreadable;
    value = [realNumber(real), realNumber(imaginary)];
  }
  if (typeof value === "number" && !Number.isFinite(value)) return unreadable;
  return { keyword, value, comment: comment.trimEnd() };
}

function parseContinuation(image: string): { value: string; comment: string } | undefined {
  if (!image.startsWith("CONTINUE  ")) return undefined;
  const card = withValue("CONTINUE", image.slice(10));
  return typeof card === "object" && typeof card.value === "string"
    ? { value: card.value, comment: card.comment }
    : undefined;
}

function wholeNumber(text: string): number | bigint {
  const value = Number(text);
  return Number.isSafeInteger(value) ? value + 0 : BigInt(text.replace("+", ""));
}

function realNumber(text: string): number {
  return Number(text.replace(/[Dd]/, "E"));
}

/** The header's blocks: cards, END, blanks up to a whole number of 2880 bytes.
 * Long texts go on in CONTINUE cards, which LONGSTRN announces.
 * @throws FitsError for what no card can hold: NaN, ±Infinity, characters outside ASCII 32-126. */
export function formatHeader(cards: readonly Card[]): Uint8Array {
  let lines = cards.map(formatCard);
  if (lines.some((line) => line.includes("CONTINUE  '")) && !cards.some((card) => card.keyword === "LONGSTRN")) {
    const first = lines.findIndex((line) => line.includes("CONTINUE  '"));
    const announce = { keyword: "LONGSTRN", value: "OGIP 1.0", comment: "long texts go on in CONTINUE cards" };
    lines = [...lines.slice(0, first), formatCard(announce), ...lines.slice(first)];
  }
  const text = lines.join("") + "END".padEnd(CARD_BYTES);
  return Buffer.from(text.padEnd(Math.ceil(text.length / BLOCK_BYTES) * BLOCK_BYTES), "latin1");
}

/** One card, or several when its text needs them: a whole number of 80 characters. */
export function formatCard(card: Card): string {
  const original = originals.get(card);
  if (original !== undefined && sameCard(original.card, card)) return original.text;
  if (card.value === undefined) return formatCommentary(card);
  const start = cardStart(card.keyword);
  if (typeof card.value === "string") return formatText(start, card, card.value);
  const value = formatValue(card.keyword, card.value);
  // Fixed format: right-justified up to column 30.
  return finish(start + value.padStart(Math.max(0, 30 - start.length)), card);
}

function sameCard(a: Card, b: Card): boolean {
  return a.keyword === b.keyword && a.value === b.value && a.comment === b.comment;
}

function cardStart(keyword: string): string {
  if (/^[A-Z0-9_-]{1,8}$/.test(keyword)) return `${keyword.padEnd(8)}= `;
  if (/^[A-Z0-9_-]+( [A-Z0-9_-]+)*$/.test(keyword) && keyword.length < 50) return `HIERARCH ${keyword} = `;
  throw unwritable(keyword, "is not a FITS keyword", "use A-Z, 0-9, _ and -, in up to 8 characters");
}

function formatCommentary(card: Card): string {
  requireAscii(card.keyword, card.comment);
  const lines = card.comment.match(/.{1,72}/g) ?? [""];
  return lines.map((line) => (card.keyword.padEnd(8) + line).padEnd(CARD_BYTES)).join("");
}

function formatValue(keyword: string, value: Exclude<CardValue, string>): string {
  if (value === null) return "";
  if (typeof value === "boolean") return value ? "T" : "F";
  if (typeof value === "bigint") return value.toString();
  if (typeof value === "number") return formatNumber(keyword, value);
  return `(${formatNumber(keyword, value[0])}, ${formatNumber(keyword, value[1])})`;
}

/** Shortest decimal form that reads back to the same number; whole numbers without a point. */
function formatNumber(keyword: string, value: number): string {
  if (!Number.isFinite(value)) throw unwritable(keyword, `is ${value}`, "leave the card out where there is no value");
  if (Number.isSafeInteger(value)) return String(value);
  const [mantissa, exponent] = String(value).split("e");
  const real = mantissa.includes(".") ? mantissa : `${mantissa}.0`;
  return exponent === undefined ? real : `${real}E${exponent.replace("+", "")}`;
}

function formatText(start: string, card: Card, value: string): string {
  requireAscii(card.keyword, value);
  const quoted = value.replaceAll("'", "''");
  if (start.length + quoted.length + 2 <= CARD_BYTES) {
    return finish(`${start}'${quoted.padEnd(8)}'`.padEnd(30), card);
  }
  if (start.startsWith("HIERARCH")) throw unwritable(card.keyword, "has too long a text for one card", "shorten it");
  const pieces = splitQuoted(quoted, CARD_BYTES - start.length - 3);
  return pieces
    .map((piece, i) => {
      const head = i === 0 ? start : "CONTINUE  ";
      if (i === pieces.length - 1) return finish(`${head}'${piece.padEnd(8)}'`, card);
      return `${head}'${piece}&'`.padEnd(CARD_BYTES);
    })
    .join("");
}

/** Pieces of at most `width` characters; a doubled quote is not parted. */
function splitQuoted(quoted: string, width: number): string[] {
  const pieces: string[] = [];
  let rest = quoted;
  while (rest.length > width) {
    let cut = width;
    const quotes = /'*$/.exec(rest.slice(0, cut))?.[0].length ?? 0;
    if (quotes % 2 === 1) cut--;
    // A reader may take blanks before the ampersand for padding; keep them off the end.
    while (rest[cut - 1] === " " && cut > 1) cut--;
    pieces.push(rest.slice(0, cut));
    rest = rest.slice(cut);
  }
  return [...pieces, rest];
}

function finish(line: string, card: Card): string {
  requireAscii(card.keyword, card.comment);
  const whole = card.comment === "" ? line : `${line} / ${card.comment}`;
  if (line.length > CARD_BYTES) throw unwritable(card.keyword, "does not fit into 80 characters", "shorten it");
  return whole.slice(0, CARD_BYTES).padEnd(CARD_BYTES);
}

function requireAscii(keyword: string, text: string): void {
  const other = /[^ -~]/u.exec(text);
  if (other !== null) {
    const code = other[0].codePointAt(0)!.toString(16).toUpperCase().padStart(4, "0");
    throw unwritable(keyword, `holds the character U+${code}`, "FITS headers hold ASCII 32-126 only");
  }
}

function unwritable(keyword: string, finding: string, remedy: string): FitsError {
  return new FitsError("card", `the card ${keyword} ${finding}`, remedy, { card: keyword });
}
