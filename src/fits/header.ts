/** A FITS header as a list of cards, in the order of the file. */

export type CardValue = string | number | boolean | bigint | null;

export interface Card {
  /** Upper case; HIERARCH keywords keep their words, separated by one blank. */
  keyword: string;
  /** Absent for COMMENT, HISTORY and blank cards, whose text is in `comment`. */
  value?: CardValue;
  comment: string;
}

export class Header {
  constructor(readonly cards: Card[] = []) {}

  /** The first card of that name. */
  card(keyword: string): Card | undefined {
    return this.cards.find((card) => card.keyword === keyword);
  }

  get(keyword: string): CardValue | undefined {
    return this.card(keyword)?.value;
  }
}
