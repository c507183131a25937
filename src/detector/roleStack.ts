/** All frames of one role to one stack, in memory that does not grow with their number.
 *
 * Up to seven good frames are held and combined exactly (`combine.ts`). Of more, seven that are spread over the list make a
 * centre, and all are read a second time, one by one, to be summed where they agree with it (`runningStack.ts`). Before
 * anything is combined, frames that are unlike the others are left out, or, where it is not clear which, refused. */
import type { Spectrograph } from "../spectrograph.js";
import { detectorLayout } from "./amplifiers.js";
import { type Assembled, assemble } from "./assemble.js";
import { combineFrames, type Stack, type StackFrame } from "./combine.js";
import { DetectorError } from "./detectorError.js";
import { darkSeconds } from "./exposure.js";
import { type FrameList, type Frames, frameList, steady } from "./frameList.js";
import { type Likeness, likenessOf, unlikeness } from "./likeness.js";
import { HalfSums } from "./quiet.js";
import type { RawImage } from "./raw.js";
import { refuseImpossible } from "./rawSanity.js";
import { RunningStack } from "./runningStack.js";

export type StackRole = "bias" | "dark" | "pixel flat";

/** So many frames are held at once. */
const MOST_HELD = 7;

/** What became of one frame of a role. */
export interface StackedFrame {
  name: string;
  checksum: string;
  used: boolean;
  /** Why it was left out, as a sentence about it without its full stop. */
  reason?: string;
  /** e⁻: median, and scatter of a pixel. NaN where the frame was not looked at so far. */
  level: number;
  noise: number;
  /** Share of its pixels that was clipped; NaN of a frame that was left out. */
  clippedShare: number;
}

export interface RoleStack {
  stack: Stack;
  halves: [Float32Array, Float32Array] | undefined;
  nx: number;
  ny: number;
  /** The first used frame's, and the first two raw frames used: for gain and read noise. */
  regions: Assembled["regions"];
  raws: RawImage[];
  /** Of the frames used. */
  names: string[];
  scales: number[];
  frames: StackedFrame[];
  assumptions: string[];
  warnings: string[];
}

/** What a role is to the stack. */
export interface RoleTreatment {
  role: StackRole;
  /** Whether the level brings Poisson noise of its own. */
  photons: boolean;
  /** Refuses a frame that no other could make up for. @throws DetectorError */
  accept: (raw: RawImage, frame: Assembled) => void;
  /** What looks wrong with a frame that plays its role all the same. @throws DetectorError when it cannot. */
  warningsOf: (raw: RawImage, frame: Assembled) => string[];
  /** Takes off, in place, what other calibrations know of. */
  prepare: (frame: Assembled, seconds: number) => void;
  scaleOf: (frame: Assembled, seconds: number) => number;
}

interface Entry extends StackedFrame {
  index: number;
  assumptions: string[];
  warnings: string[];
  scale: number;
  likeness?: Likeness;
  /** Given twice: that is no disagreement. */
  again?: boolean;
}

/** @throws DetectorError when half of the frames or more cannot play their role, or disagree. */
export async function stackRole(
  given: Frames,
  treatment: RoleTreatment,
  spectrograph?: Spectrograph,
): Promise<RoleStack | undefined> {
  const list = steady(await frameList(given));
  if (list.length === 0) return undefined;
  const reader = new Reader(list, treatment, spectrograph);
  const entries = await reader.lookAtAll();
  leaveOutUnlike(entries, treatment.role);
  const used = entries.filter((entry) => entry.used);
  const raws = await reader.firstRaws(used);
  const few = await reader.held(used);
  const [regions, { nx, ny }] = [few[0].regions, few[0]];
  const halves = new HalfSums(nx * ny);
  let stack = combineFrames(few, nx, ny, treatment.photons);
  if (few.length === used.length) {
    for (const frame of few) halves.add(frame);
  } else {
    few.length = 0;
    const running = new RunningStack(stack, nx, treatment.photons);
    for (const entry of used) {
      const frame = await reader.again(entry);
      running.add(frame);
      halves.add(frame);
    }
    stack = running.finish();
  }
  used.forEach((entry, i) => {
    entry.clippedShare = stack.clippedShare[i];
  });
  return {
    ...{ stack, nx, ny, regions, raws, halves: halves.finish() },
    assumptions: used.flatMap(({ assumptions }) => assumptions),
    warnings: [...used.flatMap(({ warnings }) => warnings), ...leftOutSentences(entries, treatment.role)],
    names: used.map(({ name }) => name),
    scales: used.map(({ scale }) => scale),
    frames: entries.map(({ name, checksum, used, reason, level, noise, clippedShare }) => ({
      ...{ name, checksum, used, level, noise, clippedShare },
      ...(reason === undefined ? {} : { reason }),
    })),
  };
}

type HeldFrame = Assembled & StackFrame;

class Reader {
  /** By their number in the list. */
  private readonly kept = new Map<number, HeldFrame>();
  private readonly raws = new Map<number, RawImage>();

  constructor(
    private readonly list: FrameList,
    private readonly treatment: RoleTreatment,
    private readonly spectrograph: Spectrograph | undefined,
  ) {}

  async lookAtAll(): Promise<Entry[]> {
    const entries: Entry[] = [];
    const { length } = this.list;
    const keep = new Set(spread(Array.from({ length }, (_, i) => i)));
    for (let index = 0; index < length; index++) {
      const entry = await this.lookAt(index, keep.has(index));
      markAsCopy(entry, entries);
      entries.push(entry);
      refuseHalf(entries, length, this.treatment.role);
    }
    return entries;
  }

  private async lookAt(index: number, keep: boolean): Promise<Entry> {
    const { treatment, spectrograph, raws, kept } = this;
    const raw = await this.list.read(index);
    refuseImpossible(raw, spectrograph);
    const frame = assemble(raw, detectorLayout(raw, spectrograph));
    treatment.accept(raw, frame);
    const unknown = { level: Number.NaN, noise: Number.NaN, clippedShare: Number.NaN, scale: 0 };
    const { assumptions } = frame.layout;
    const told = { index, name: raw.name, checksum: raw.checksum ?? "", ...unknown, assumptions, warnings: [] };
    let warnings: string[];
    try {
      warnings = treatment.warningsOf(raw, frame);
    } catch (error) {
      if (!(error instanceof DetectorError)) throw error;
      return { ...told, used: false, reason: error.message };
    }
    const ready = this.prepared(raw, frame);
    const likeness = likenessOf(frame, ready.scale, treatment.photons);
    if (keep) kept.set(index, ready);
    if (raws.size < 2) raws.set(index, raw);
    const { level, noise } = likeness;
    return { ...told, used: true, level, noise, scale: ready.scale, warnings, likeness };
  }

  private prepared(raw: RawImage, frame: Assembled): HeldFrame {
    const seconds = darkSeconds(raw);
    this.treatment.prepare(frame, seconds);
    return Object.assign(frame, { scale: this.treatment.scaleOf(frame, seconds) });
  }

  /** The frame of an entry, read once more. */
  async again({ index }: Entry): Promise<HeldFrame> {
    const raw = await this.list.read(index);
    return this.prepared(raw, assemble(raw, detectorLayout(raw, this.spectrograph)));
  }

  /** All of `used`, or those of them that make the centre, in order. */
  async held(used: Entry[]): Promise<HeldFrame[]> {
    const frames: HeldFrame[] = [];
    for (const entry of spread(used)) {
      // One that was to be held may have been left out, and another steps in.
      frames.push(this.kept.get(entry.index) ?? (await this.again(entry)));
    }
    this.kept.clear();
    return frames;
  }

  async firstRaws(used: Entry[]): Promise<RawImage[]> {
    const raws: RawImage[] = [];
    for (const { index } of used.slice(0, 2)) raws.push(this.raws.get(index) ?? (await this.list.read(index)));
    this.raws.clear();
    return raws;
  }
}

/** Up to seven, evenly over the list. */
function spread<T>(list: T[]): T[] {
  if (list.length <= MOST_HELD) return list;
  return Array.from({ length: MOST_HELD }, (_, k) => list[Math.round((k * (list.length - 1)) / (MOST_HELD - 1))]);
}

/** The same pixels a second time would make the stack's error look smaller than it is. */
function markAsCopy(entry: Entry, before: Entry[]): void {
  const twin = entry.checksum === "" ? undefined : before.find(({ checksum }) => checksum === entry.checksum);
  if (twin === undefined || !entry.used) return;
  entry.used = false;
  entry.again = true;
  entry.reason = `${entry.name} holds the same pixels as ${twin.name}`;
}

/** @throws DetectorError as soon as half of all frames cannot play their role: then it is the list that is wrong. */
function refuseHalf(entries: Entry[], nAll: number, role: StackRole): void {
  const bad = entries.filter(({ used, again }) => !used && !again);
  if (bad.length === 0 || 2 * bad.length < nAll) return;
  const more = bad.length > 1 ? ` (${bad.length} of the ${nAll} ${role} frames are like that)` : "";
  throw new DetectorError(`${bad[0].reason!.replace(/; check the list/, `${more}; check the list`)}`);
}

function leaveOutUnlike(entries: Entry[], role: StackRole): void {
  const looked = entries.filter(({ used }) => used);
  const reasons = unlikeness(
    looked.map(({ likeness }) => likeness!),
    role,
  );
  looked.forEach((entry, i) => {
    if (reasons[i] === undefined) return;
    entry.used = false;
    entry.reason = `${entry.name} ${reasons[i]}`;
  });
  const once = entries.filter(({ again }) => !again);
  const out = once.filter(({ used }) => !used);
  if (2 * out.length < once.length) return;
  const names = out.map(({ name }) => name).join(", ");
  const first = out.find(({ likeness }) => likeness !== undefined)!;
  throw new DetectorError(
    `${names}: ${out.length} of the ${once.length} ${role} frames differ from the rest, too many to tell which are right (${first.reason}); give frames that belong together.`,
  );
}

function leftOutSentences(entries: Entry[], role: StackRole): string[] {
  const nUsed = entries.filter(({ used }) => used).length;
  return entries.flatMap(({ used, reason }) => {
    if (used) return [];
    const sentence = reason!.replace(/; [^;]*\.$/, "");
    return [`${sentence}; it is left out, and ${nUsed} of the ${entries.length} ${role} frames remain.`];
  });
}
