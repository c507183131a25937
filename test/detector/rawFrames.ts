/** Small raw frames with known truth for the detector's tests: uneven on purpose. Invented data. */
import type { Amplifier } from "../../src/detector/amplifiers.js";
import type { RawImage } from "../../src/detector/raw.js";
import { type CardValue, Header } from "../../src/fits/header.js";
import { parseSection } from "../../src/fits/sections.js";
import { openStream } from "../../src/random/streams.js";

/** Uniform numbers in [0, 1), good enough that differences of neighbouring pixels show no trace of their making. */
export function seeded(seed: number): () => number {
  return openStream(seed, "detector tests").uniform;
}

export type Cards = Record<string, CardValue>;

/** A raw frame of `nx` × `ny` with these cards; `adu` gives each pixel, x and y from 0. */
export function rawFrame(
  name: string,
  nx: number,
  ny: number,
  cards: Cards,
  adu: (x: number, y: number) => number,
): RawImage {
  const data = new Float64Array(nx * ny);
  for (let y = 0; y < ny; y++) for (let x = 0; x < nx; x++) data[y * nx + x] = adu(x, y);
  const header = new Header(Object.entries(cards).map(([keyword, value]) => ({ keyword, value, comment: "" })));
  return { name, nx, ny, data, header, bitpix: 16 };
}

/** Cards of one amplifier: data in columns 1–100, overscan in 101–124, 80 rows. */
export const ONE_AMPLIFIER: Cards = {
  GAIN: 1.6,
  RDNOISE: 3.3,
  DATASEC: "[1:100,1:80]",
  BIASSEC: "[101:124,1:80]",
  CCDSEC: "[1:100,1:80]",
  SATURATE: 60000,
  DISPAXIS: 1,
};

/** An amplifier for functions that take one. */
export function amplifierOf(data: string, overscan: string[], change: Partial<Amplifier> = {}): Amplifier {
  return {
    number: 1,
    gain: 1.6,
    readNoise: 3.3,
    data: parseSection(data),
    overscan: overscan.map((text) => parseSection(text)),
    levelFor: "rows",
    overscanSkip: 0,
    place: parseSection(data),
    ...change,
  };
}

export function without(cards: Cards, ...keywords: string[]): Cards {
  return Object.fromEntries(Object.entries(cards).filter(([keyword]) => !keywords.includes(keyword)));
}

/** Mean and root mean square deviation of finite values. */
export function momentsOf(values: ArrayLike<number>): { mean: number; sigma: number; n: number } {
  let n = 0;
  let sum = 0;
  let sum2 = 0;
  for (let i = 0; i < values.length; i++) {
    if (!Number.isFinite(values[i])) continue;
    n++;
    sum += values[i];
    sum2 += values[i] ** 2;
  }
  return { mean: sum / n, sigma: Math.sqrt(sum2 / n - (sum / n) ** 2), n };
}
