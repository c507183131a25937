/** Any number of fibre flats to one, in memory that does not grow with their number: nothing that is traced or measured looks
 * at single flats, only at their mean. Up to four are held and combined (`combineFlats`); of more, four that are spread over
 * the list make a centre, and all are read once more, one by one, and averaged within 5 σ of it. */
import { DetectorError } from "../detector/detectorError.js";
import type { Frame } from "../detector/frame.js";
import { combineFlats, type Flat, flatLevel, pairSigma2 } from "./flat.js";
import { type FlatPlace, flatsApart, pairApart, placeAgainst } from "./flatPlace.js";

const MOST_HELD = 4;
const MOST_COUNTED = 255;
const KAPPA = 5;

export interface FlatSource {
  length: number;
  /** The flat of that number, corrected; asked again, it gives the same. @throws DetectorError when it is none. */
  read: (index: number) => Promise<Frame>;
}

export interface FlatStack {
  flat: Flat;
  /** Numbers of the flats in it. */
  used: number[];
  assumptions: string[];
  warnings: string[];
}

interface Entry {
  index: number;
  name: string;
  reason?: string;
  place?: FlatPlace;
  assumptions: string[];
  warnings: string[];
}

/** @throws DetectorError when half of the flats or more are none, and what reading throws. */
export async function stackFlats(source: FlatSource): Promise<FlatStack> {
  const all = Array.from({ length: source.length }, (_, i) => i);
  const kept = new Map<number, Frame>();
  const entries = await lookAtAll(source, new Set(spread(all)), kept);
  const flats = entries.filter(({ reason }) => reason === undefined);
  const places = flats.map(({ place }) => place!);
  flatsApart(places).forEach((reason, i) => {
    if (reason !== undefined) flats[i].reason = `${flats[i].name} ${reason}`;
  });
  const used = entries.filter(({ reason }) => reason === undefined);
  const held: Frame[] = [];
  for (const { index } of spread(used)) held.push(kept.get(index) ?? (await source.read(index)));
  kept.clear();
  let flat = combineFlats(held);
  if (used.length > held.length) {
    held.length = 0;
    const running = new RunningFlat(flat);
    for (const { index } of used) running.add(await source.read(index));
    flat = running.finish(used.map(({ name }) => name).join(", "));
  }
  const names = flats.map(({ name }) => name);
  return {
    ...{ flat, used: used.map(({ index }) => index) },
    assumptions: used.flatMap(({ assumptions }) => assumptions),
    warnings: [...used.flatMap(({ warnings }) => warnings), ...leftOut(entries), ...pairApart(names, places)],
  };
}

async function lookAtAll(source: FlatSource, keep: Set<number>, kept: Map<number, Frame>): Promise<Entry[]> {
  const entries: Entry[] = [];
  let first: Frame | undefined;
  for (let index = 0; index < source.length; index++) {
    try {
      const frame = await source.read(index);
      first ??= frame;
      const { name, assumptions, warnings } = frame;
      // Of another window: combining says so.
      const place = frame.electrons.length === first.electrons.length ? placeAgainst(first, frame) : undefined;
      if (place === undefined) combineFlats([first, frame]);
      entries.push({ index, name, assumptions, warnings, ...(place ? { place } : {}) });
      if (keep.has(index)) kept.set(index, frame);
    } catch (error) {
      const nBad = entries.filter(({ reason }) => reason !== undefined).length + 1;
      if (!(error instanceof DetectorError) || !isNoFlat(error) || 2 * nBad >= source.length) throw error;
      entries.push({ index, name: "", reason: error.message, assumptions: [], warnings: [] });
    }
  }
  return entries;
}

function isNoFlat({ message }: DetectorError): boolean {
  return message.includes(" was given as a fibre flat, but ");
}

function leftOut(entries: Entry[]): string[] {
  const nUsed = entries.filter(({ reason }) => reason === undefined).length;
  return entries.flatMap(({ reason }) => {
    if (reason === undefined) return [];
    return [
      `${reason.replace(/; check the list.*$/, "")}; it is left out, and ${nUsed} of the ${entries.length} fibre flats remain.`,
    ];
  });
}

function spread<T>(list: T[]): T[] {
  if (list.length <= MOST_HELD) return list;
  return Array.from({ length: MOST_HELD }, (_, k) => list[Math.round((k * (list.length - 1)) / (MOST_HELD - 1))]);
}

/** Sums of flats at the centre's level, one frame at a time. */
class RunningFlat {
  private nFrame = 0;
  private readonly sum: Float64Array;
  private readonly count: Uint16Array;

  /** @param centre a mean of some of them; its first frame says what noise to expect. */
  constructor(private readonly centre: Flat) {
    this.sum = new Float64Array(centre.electrons.length);
    this.count = new Uint16Array(centre.electrons.length);
  }

  add(frame: Frame): void {
    const { centre, sum, count } = this;
    const level = flatLevel(frame, centre);
    this.nFrame++;
    for (let at = 0; at < sum.length; at++) {
      const value = frame.electrons[at] / level;
      if (frame.mask[at] !== 0 || Number.isNaN(value)) continue;
      const middle = centre.electrons[at];
      // Where the centre has no value there is nothing to compare with.
      if ((value - middle) ** 2 > KAPPA ** 2 * pairSigma2(centre.frame, at, middle)) continue;
      sum[at] += value;
      count[at]++;
    }
  }

  finish(name: string): Flat {
    const { centre, sum, count, nFrame } = this;
    const { electrons, mask, nUsed } = centre;
    for (let at = 0; at < sum.length; at++) {
      // A pixel at odds with its own centre keeps that.
      if (count[at] === 0) continue;
      electrons[at] = sum[at] / count[at];
      nUsed[at] = Math.min(count[at], MOST_COUNTED);
      mask[at] = 0;
    }
    return { ...centre, name, nFrame };
  }
}
