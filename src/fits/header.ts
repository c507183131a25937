/** A FITS header as a list of cards, in the order of the file. */
import { FitsError, type FitsPlace } from "./errors.js";

/** A complex value is a pair (real, imaginary); an integer beyond 2⁵³ is a bigint; null is a card without value. */
export type CardValue = string | number | boolean | bigint | null | readonly [number, number];

export interface Card {
  /** Upper case; HIERARCH keywords keep their words, separated by one blank. */
  keyword: string;
  /** Absent for COMMENT, HISTORY and blank cards, whose text is in `comment`. */
  value?: CardValue;
  comment: string;
}

export class Header {
  /** `place`: file and HDU, for messages. */
  constructor(
    readonly cards: Card[] = [],
    readonly place: FitsPlace = {},
  ) {}

  /** The first card of that name. */
  card(keyword: string): Card | undefined {
    return this.cards.find((card) => card.keyword === keyword);
  }

  has(keyword: string): boolean {
    return this.card(keyword) !== undefined;
  }

  get(keyword: string): CardValue | undefined {
    return this.card(keyword)?.value;
  }

  /** The value as a number; undefined when the card is absent or has no value.
   * @throws FitsError when it is text, logical or complex. */
  number(keyword: string): number | undefined {
    const value = this.get(keyword);
    if (value === undefined || value === null) return undefined;
    if (typeof value === "bigint") return Number(value);
    if (typeof value === "number") return value;
    throw this.wrongType(keyword, value, "a number");
  }

  /** The value as a whole number within ±2⁵³; undefined when the card is absent or has no value.
   * @throws FitsError when it is anything else. */
  integer(keyword: string): number | undefined {
    const value = this.get(keyword);
    if (value === undefined || value === null) return undefined;
    if (typeof value === "number" && Number.isSafeInteger(value)) return value;
    throw this.wrongType(keyword, value, "a whole number");
  }

  /** The value as text without trailing blanks; undefined when the card is absent or has no value.
   * @throws FitsError when it is not a string. */
  text(keyword: string): string | undefined {
    const value = this.get(keyword);
    if (value === undefined || value === null) return undefined;
    if (typeof value === "string") return value;
    throw this.wrongType(keyword, value, "text in quotes");
  }

  /** The value as true (T) or false (F); undefined when the card is absent or has no value.
   * @throws FitsError when it is not a logical value. */
  logical(keyword: string): boolean | undefined {
    const value = this.get(keyword);
    if (value === undefined || value === null) return undefined;
    if (typeof value === "boolean") return value;
    throw this.wrongType(keyword, value, "T or F");
  }

  /** Replaces the first card of that name, or adds one at the end. */
  set(keyword: string, value: CardValue, comment = ""): void {
    const card: Card = { keyword, value, comment };
    const at = this.cards.findIndex((old) => old.keyword === keyword);
    if (at >= 0) this.cards[at] = card;
    else this.cards.push(card);
  }

  /** Adds a line of HISTORY; long text is folded when written. */
  history(text: string): void {
    this.cards.push({ keyword: "HISTORY", comment: text });
  }

  private wrongType(keyword: string, value: CardValue, expected: string): FitsError {
    const found = typeof value === "string" ? `'${value}'` : Array.isArray(value) ? `(${value.join(", ")})` : value;
    return new FitsError("card", `${keyword} is ${found} where ${expected} is expected`, "correct that card", {
      ...this.place,
      card: keyword,
    });
  }
}
