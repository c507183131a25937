/** A raw frame: what the detector wrote, in ADU, and its header. */
import { inputCards } from "../fits/carry.js";
import { type CardValue, Header } from "../fits/header.js";
import type { Kernels, Workbench } from "../kernels/module.js";
import { DetectorError } from "./detectorError.js";

/** What the detector stage needs of a FITS image; row-major, data[(row) · nx + column], row 0 is the first of the file. */
export interface RawImage {
  name: string;
  nx: number;
  ny: number;
  /** ny × nx, ADU; NaN where the file has no value. */
  data: Float32Array | Float64Array;
  header: Header;
  /** Read where the image's own header lacks a keyword. */
  primaryHeader?: Header;
  bitpix?: number;
  unit?: string | null | undefined;
  warnings?: string[];
  /** Stands for the HDU in a product's HISTORY. */
  checksum?: string;
  /** Whose memory the frame that is made of it may lie in. */
  kernels?: Kernels;
  /** Where `data` lie, when that is kernel memory, … */
  memory?: Workbench;
  /** … and room for the frame in front of them: it is taken, and what then works on the frame may write over `data`. */
  room?: Uint8Array;
}

/** The first of these keywords that has a value, in the image's header, then in the primary one. */
export function cardOf(raw: RawImage, keywords: string[]): { keyword: string; value: CardValue } | undefined {
  for (const header of [raw.header, raw.primaryHeader]) {
    for (const keyword of keywords) {
      const value = header?.get(keyword);
      if (value !== undefined && value !== null && value !== "") return { keyword, value };
    }
  }
  return undefined;
}

/** The cards a product carries on: the primary header's, then what the image's own header adds to them. */
export function carriedHeader(raw: RawImage): Header {
  const { header, primaryHeader } = raw;
  if (primaryHeader === undefined || primaryHeader === header) return header;
  const own = inputCards(header).filter((card) => card.value !== undefined && !primaryHeader.has(card.keyword));
  return new Header([...primaryHeader.cards, ...own], primaryHeader.place);
}

/** A number from the header, also when it was written as a string; undefined when no such card is there.
 * @throws DetectorError when the card holds something else than a number. */
export function numberOf(raw: RawImage, keywords: string[]): { keyword: string; value: number } | undefined {
  const card = cardOf(raw, keywords);
  if (card === undefined) return undefined;
  const text = String(card.value).trim();
  if (typeof card.value === "boolean" || text === "" || Number.isNaN(Number(text))) {
    if (text.toLowerCase() === "nan") return { keyword: card.keyword, value: Number.NaN };
    throw new DetectorError(
      `${raw.name}: ${card.keyword} is '${card.value}', but a number was expected; correct the header or give it in the spectrograph file.`,
    );
  }
  return { keyword: card.keyword, value: Number(text) };
}

/** A string from the header, trimmed. */
export function textOf(raw: RawImage, keywords: string[]): { keyword: string; value: string } | undefined {
  const card = cardOf(raw, keywords);
  return card === undefined ? undefined : { keyword: card.keyword, value: String(card.value).trim() };
}
