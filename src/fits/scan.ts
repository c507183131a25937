/** The strict look at a file before anything else touches it (FITS Standard 4.0, sections 3 and 4.4.1): blocks of 2880
 * bytes, mandatory keywords in their order, END, sizes that can be counted, data that are all there. */
import { BLOCK_BYTES, CARD_BYTES, parseCard, parseCards } from "./cards.js";
import { FitsError, type FitsErrorCode } from "./errors.js";
import { Header } from "./header.js";
import type { Source } from "./source.js";

export interface ScannedHdu {
  /** Counted from 0. */
  index: number;
  /** "PRIMARY", "IMAGE", "BINTABLE", "TABLE", or what else XTENSION says. */
  type: string;
  /** EXTNAME; empty when there is none. */
  name: string;
  header: Header;
  bitpix: number;
  /** NAXIS1, NAXIS2, … */
  axes: number[];
  /** Random groups, a kind of primary that is no image. */
  groups: boolean;
  /** Bytes of table heap or group parameters. */
  pcount: number;
  headerOffset: number;
  dataOffset: number;
  /** Without the padding. */
  dataBytes: number;
}

export interface Scan {
  hdus: ScannedHdu[];
  /** What is odd but does no harm; one sentence each. */
  warnings: string[];
}

/** Every HDU of the file.
 * @throws FitsError at the first thing that is against the standard and matters. */
export function scanFits(source: Source): Scan {
  const warnings: string[] = [];
  const hdus = firstHdus(source, warnings, () => false);
  const last = hdus[hdus.length - 1];
  const at = last.dataOffset + roundUp(last.dataBytes);
  if (at > source.size)
    warnings.push(`${source.name}: the padding after the last HDU is cut short; its data are whole.`);
  if (at < source.size) warnings.push(`${source.name}: ${source.size - at} bytes after the last HDU are left aside.`);
  return { hdus, warnings };
}

/** HDUs up to the one that is enough, or all of them.
 * @throws FitsError as `scanFits`. */
export function firstHdus(source: Source, warnings: string[], isEnough: (hdu: ScannedHdu) => boolean): ScannedHdu[] {
  const hdus: ScannedHdu[] = [];
  if (source.size < BLOCK_BYTES) {
    throw new FitsError("truncated", `${source.size} bytes where a FITS file has at least 2880`, "fetch it again", {
      file: source.name,
    });
  }
  let at = 0;
  do {
    const hdu = new HduScan(source, hdus.length, at).scan(warnings);
    hdus.push(hdu);
    if (isEnough(hdu)) return hdus;
    at = hdu.dataOffset + roundUp(hdu.dataBytes);
  } while (startsExtension(source, at));
  return hdus;
}

function roundUp(nBytes: number): number {
  return Math.ceil(nBytes / BLOCK_BYTES) * BLOCK_BYTES;
}

function startsExtension(source: Source, at: number): boolean {
  if (at + 8 > source.size) return false;
  const start = new Uint8Array(8);
  source.readInto(start, at);
  return Buffer.from(start).toString("latin1") === "XTENSION";
}

/** One HDU while it is being looked at. */
class HduScan {
  private text = "";

  constructor(
    private readonly source: Source,
    private readonly index: number,
    private readonly headerOffset: number,
  ) {}

  scan(warnings: string[]): ScannedHdu {
    const dataOffset = this.readHeader();
    const nCards = this.text.length / CARD_BYTES;
    const type = this.index === 0 ? this.requireSimple() : this.requireText(0, "XTENSION");
    const bitpix = this.requireInteger(1, "BITPIX", -64, 64);
    if (![8, 16, 32, 64, -32, -64].includes(bitpix)) {
      throw this.error("structure", `BITPIX is ${bitpix}`, "it must be 8, 16, 32, 64, -32 or -64", 1, "BITPIX");
    }
    const nAxes = this.requireInteger(2, "NAXIS", 0, 999);
    if (nAxes + 3 > nCards)
      throw this.error("structure", `only ${nCards} cards for NAXIS = ${nAxes}`, "fetch it again", 2);
    const axes = Array.from({ length: nAxes }, (_, i) =>
      this.requireInteger(3 + i, `NAXIS${i + 1}`, 0, Number.MAX_SAFE_INTEGER),
    );
    const header = this.parseHeader(warnings);
    const groups = this.index === 0 && axes[0] === 0 && nAxes > 1 && header.get("GROUPS") === true;
    const { pcount, gcount } = this.counts(type, bitpix, nAxes, groups, header);
    const nValues = nAxes === 0 ? 0 : (groups ? axes.slice(1) : axes).reduce((product, size) => product * size, 1);
    const dataBytes = (Math.abs(bitpix) / 8) * gcount * (pcount + nValues);
    this.requireData(dataOffset, dataBytes);
    const name = header.get("EXTNAME");
    return {
      index: this.index,
      type,
      name: typeof name === "string" ? name : "",
      header,
      bitpix,
      axes,
      groups,
      pcount,
      headerOffset: this.headerOffset,
      dataOffset,
      dataBytes,
    };
  }

  /** Collects the cards up to END; returns where the data start. */
  private readHeader(): number {
    const block = new Uint8Array(BLOCK_BYTES);
    const texts: string[] = [];
    for (let at = this.headerOffset; ; at += BLOCK_BYTES) {
      if (at + BLOCK_BYTES > this.source.size) {
        this.text = texts.join("");
        throw this.error("truncated", "the header has no END card", "fetch the file again", texts.length * 36);
      }
      this.source.readInto(block, at);
      const text = Buffer.from(block).toString("latin1");
      const end = this.endOf(text, texts.length * 36);
      texts.push(text.slice(0, end * CARD_BYTES));
      if (end * CARD_BYTES < BLOCK_BYTES) {
        this.requireNothingAfter(text.slice((end + 1) * CARD_BYTES), texts.length * 36 - 35 + end);
        this.text = texts.join("");
        return at + BLOCK_BYTES;
      }
    }
  }

  /** A card that slipped behind END would be lost in silence, BZERO for one. Some writers fill with NUL instead of blanks. */
  private requireNothingAfter(rest: string, firstCard: number): void {
    const at = rest.search(/[^ \0]/);
    if (at >= 0) {
      const card = firstCard + Math.floor(at / CARD_BYTES);
      throw this.error("structure", "the header goes on after its END card", "move END behind the last card", card);
    }
  }

  /** The number of cards before END in this block; 36 when END is not in it. */
  private endOf(block: string, firstCard: number): number {
    for (let i = 0; i < BLOCK_BYTES / CARD_BYTES; i++) {
      const card = block.slice(i * CARD_BYTES, (i + 1) * CARD_BYTES);
      if (card.trimEnd() === "END") return i;
      if (!/^[ -~]{8}/.test(card)) {
        if (firstCard + i === 0) this.notFits(card);
        throw this.error(
          "structure",
          `header card ${firstCard + i + 1} is not text`,
          "the header is damaged",
          firstCard + i,
        );
      }
      if (firstCard + i === 0 && this.index === 0 && !card.startsWith("SIMPLE  =")) this.notFits(card);
    }
    return BLOCK_BYTES / CARD_BYTES;
  }

  private notFits(card: string): never {
    const start = card.slice(0, 8).replace(/[^ -~]/g, "?");
    throw this.error("structure", `starts with "${start}" where SIMPLE = T is expected`, "give a FITS file", 0);
  }

  private parseHeader(warnings: string[]): Header {
    let text = this.text;
    const place = { file: this.source.name, hdu: this.index };
    const say = (what: string) => warnings.push(`${this.source.name}: HDU ${this.index}: ${what}.`);
    if (/[^ -~]/.test(text)) {
      text = text.replace(/[^ -~]/g, "?");
      say("characters that are not ASCII 32-126 stand in the header and are read as question marks");
    }
    const { cards, problems } = parseCards(text);
    for (const problem of problems.slice(0, 3)) say(`${problem}, and this card is left aside`);
    if (problems.length > 3) say(`${problems.length - 3} more cards that cannot be understood are left aside`);
    return new Header(cards, place);
  }

  private requireSimple(): string {
    const value = this.valueAt(0, "SIMPLE");
    if (value !== true) {
      throw this.error(
        "unsupported",
        `SIMPLE is ${value === false ? "F" : value}`,
        "only standard FITS is read",
        0,
        "SIMPLE",
      );
    }
    return "PRIMARY";
  }

  private requireText(i: number, keyword: string): string {
    const value = this.valueAt(i, keyword);
    if (typeof value === "string") return value;
    throw this.error("structure", `${keyword} is ${value}`, "it must be text in quotes", i, keyword);
  }

  private requireInteger(i: number, keyword: string, low: number, high: number): number {
    const value = this.valueAt(i, keyword);
    if (typeof value === "number" && Number.isInteger(value) && value >= low && value <= high) return value;
    const range = high === Number.MAX_SAFE_INTEGER ? `at least ${low}` : `from ${low} to ${high}`;
    throw this.error("structure", `${keyword} is ${value}`, `it must be a whole number ${range}`, i, keyword);
  }

  private valueAt(i: number, keyword: string) {
    const image = this.text.slice(i * CARD_BYTES, (i + 1) * CARD_BYTES);
    const found = image.slice(0, 8).trimEnd();
    if (found !== keyword) {
      const what = image === "" ? "END" : `"${found}"`;
      throw this.error(
        "structure",
        `card ${i + 1} is ${what} where ${keyword} is expected`,
        "repair the header",
        i,
        keyword,
      );
    }
    const card = parseCard(image);
    if (typeof card === "string") throw this.error("structure", card, "repair the header", i, keyword);
    return card.value;
  }

  /** PCOUNT and GCOUNT, where they are mandatory, and what each kind of HDU asks of them. */
  private counts(type: string, bitpix: number, nAxes: number, groups: boolean, header: Header) {
    if (groups) return { pcount: this.groupCount(header, "PCOUNT"), gcount: this.groupCount(header, "GCOUNT") };
    if (this.index === 0) return { pcount: 0, gcount: 1 };
    const most = type === "IMAGE" || type === "TABLE" ? 0 : Number.MAX_SAFE_INTEGER;
    const pcount = this.requireInteger(3 + nAxes, "PCOUNT", 0, most);
    const isTable = type === "TABLE" || type === "BINTABLE";
    const one = isTable || type === "IMAGE" ? 1 : Number.MAX_SAFE_INTEGER;
    const gcount = this.requireInteger(4 + nAxes, "GCOUNT", one === 1 ? 1 : 0, one);
    if (isTable) {
      if (bitpix !== 8 || nAxes !== 2) {
        const found = `a ${type} has BITPIX ${bitpix} and NAXIS ${nAxes}`;
        throw this.error("structure", found, "it must have BITPIX 8 and NAXIS 2", 1);
      }
      this.requireInteger(5 + nAxes, "TFIELDS", 0, 999);
    }
    return { pcount, gcount };
  }

  private groupCount(header: Header, keyword: string): number {
    const value = header.integer(keyword) ?? (keyword === "GCOUNT" ? 1 : 0);
    if (value < 0) throw this.error("structure", `${keyword} is ${value}`, "it must be at least 0", 0, keyword);
    return value;
  }

  private requireData(dataOffset: number, dataBytes: number): void {
    if (!Number.isSafeInteger(dataOffset + dataBytes + BLOCK_BYTES)) {
      throw this.error("structure", `the header asks for ${dataBytes} bytes of data`, "repair BITPIX and NAXISn", 1);
    }
    const has = this.source.size - dataOffset;
    if (has < dataBytes) {
      const finding = `the file ends after ${has} of ${dataBytes} bytes of data`;
      const place = { file: this.source.name, hdu: this.index, byteOffset: this.source.size };
      throw new FitsError("truncated", finding, "fetch it again", place);
    }
  }

  private error(code: FitsErrorCode, finding: string, remedy: string, card: number, keyword?: string): FitsError {
    const byteOffset = this.headerOffset + card * CARD_BYTES;
    return new FitsError(code, finding, remedy, { file: this.source.name, hdu: this.index, byteOffset, card: keyword });
  }
}
