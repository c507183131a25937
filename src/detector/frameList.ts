/** Frames that can be read again, one by one: a stack of many needs one of them in memory at a time. */
import { DetectorError } from "./detectorError.js";
import type { RawImage } from "./raw.js";

export interface FrameList {
  length: number;
  /** The frame of that number, from 0; asked again, it gives the same. */
  read: (index: number) => RawImage | Promise<RawImage>;
}

/** Raw frames of one role. What is iterated is kept as long as its stack is made, since an iterable may hold once only
 * (a generator does): of many frames give a `FrameList`, so that memory does not grow with their number. */
export type Frames = FrameList | Iterable<RawImage> | AsyncIterable<RawImage>;

export async function frameList(frames: Frames): Promise<FrameList> {
  if ("read" in frames) return frames;
  const kept: RawImage[] = [];
  for await (const frame of frames) kept.push(frame);
  return { length: kept.length, read: (index) => kept[index] };
}

/** A list that notices when a frame is another one the second time.
 * @throws DetectorError from its `read`. */
export function steady(list: FrameList): FrameList {
  const seen = new Map<number, string>();
  return {
    length: list.length,
    read: async (index) => {
      const raw = await list.read(index);
      const now = raw.checksum ?? "";
      const before = seen.get(index) ?? now;
      if (before !== now) {
        throw new DetectorError(`${raw.name} changed while it was read for the second time; wait until it is whole.`);
      }
      seen.set(index, now);
      return raw;
    },
  };
}
