/** Slits of any layout, damaged in the ways that slits are, as the ribbons of light that a cut would find. */
import type { SlitLayout } from "../../src/tramlines/layout.js";
import { slitPositions, type streamOf } from "./flatScene.js";

export interface Ribbon {
  position: number;
  light: number;
  /** The fibre that it truly is, from 1; 0 for a ghost. */
  truth: number;
}

/** A slit that has suffered: which of its fibres are lit, and where they stand. */
export type Damage = (layout: SlitLayout, lit: Set<number>, uniform: () => number) => void;

/** How many fibres a layout has. */
export const n = (layout: SlitLayout) => layout.blocks.reduce((sum, count) => sum + count, 0);
export function blockRange(layout: SlitLayout, block: number): [number, number] {
  const from = layout.blocks.slice(0, block).reduce((sum, count) => sum + count, 1);
  return [from, from + layout.blocks[block] - 1];
}
export const pick = (uniform: () => number, count: number) => Math.floor(uniform() * count);

export const damages: Record<string, Damage> = {
  none: () => {},
  "first fibre missing": (_, lit) => lit.delete(1),
  "last fibre missing": (layout, lit) => lit.delete(n(layout)),
  "fibres missing at either end": (layout, lit, uniform) => {
    for (let i = 0; i <= pick(uniform, 4); i++) lit.delete(uniform() < 0.5 ? 1 + i : n(layout) - i);
  },
  "a fifth of a block unlit": (layout, lit, uniform) => {
    const [from, to] = blockRange(layout, pick(uniform, layout.blocks.length));
    const count = Math.max(1, Math.round(0.2 * (to - from + 1)));
    const first = from + pick(uniform, to - from + 2 - count);
    for (let i = 0; i < count; i++) lit.delete(first + i);
  },
  "half of the slit unlit": (layout, lit, uniform) => {
    const upper = uniform() < 0.5;
    for (let fibre = 1; fibre <= n(layout); fibre++) if (fibre > n(layout) / 2 === upper) lit.delete(fibre);
  },
  "only one block lit": (layout, lit, uniform) => {
    const [from, to] = blockRange(layout, pick(uniform, layout.blocks.length));
    for (let fibre = 1; fibre <= n(layout); fibre++) if (fibre < from || fibre > to) lit.delete(fibre);
  },
  "a block in the middle unlit": (layout, lit, uniform) => {
    if (layout.blocks.length < 3) return;
    const [from, to] = blockRange(layout, 1 + pick(uniform, layout.blocks.length - 2));
    for (let fibre = from; fibre <= to; fibre++) lit.delete(fibre);
  },
  "dead fibres that are not listed": (layout, lit, uniform) => {
    for (let fibre = 1; fibre <= n(layout); fibre++) if (uniform() < 0.03) lit.delete(fibre);
  },
  "light in a listed dead fibre": (layout, lit) => {
    if (layout.dead.length > 0) lit.add(layout.dead[0]);
  },
};

/** Any layout: 1 to 8 blocks of 5 to 30 fibres, pitch 4 to 10 px, gaps of 0.3 to 1.5 pitches, some listed dead. */
export function anyLayout(uniform: () => number): SlitLayout {
  const count = 5 + pick(uniform, 26);
  const blocks = Array.from({ length: 1 + pick(uniform, 8) }, () =>
    uniform() < 0.7 ? count : Math.max(3, count + pick(uniform, 5) - 2),
  );
  const pitch = 4 + 6 * uniform();
  const layout = { blocks, pitch, gap: pitch * (0.3 + 1.2 * uniform()), dead: [] as number[], sky: [] };
  const share = uniform() < 0.6 ? 0.02 : 0;
  for (let fibre = 1; fibre <= n(layout); fibre++) if (uniform() < share) layout.dead.push(fibre);
  return layout;
}

/** Its ribbons: scale within 5 %, gaps within 15 %, distortion of 2 %, positions off by 2 % of the pitch; some moved off
 * the detector by up to two pitches. */
export function anyRibbons(
  layout: SlitLayout,
  lit: Set<number>,
  random: ReturnType<typeof streamOf>,
  moved: boolean,
): Ribbon[] {
  const { uniform, normal } = random;
  const scale = 1 + 0.05 * (2 * uniform() - 1);
  const bend = 0.02 * (2 * uniform() - 1);
  const truly = { ...layout, gap: (layout.gap as number) * (1 + 0.15 * (2 * uniform() - 1)) };
  const places = slitPositions(truly, scale);
  const span = Math.max(1, places[places.length - 1]);
  const shift = moved ? (1 + uniform()) * layout.pitch * (uniform() < 0.5 ? 1 : -1) : 0;
  return places.flatMap((y, i) => {
    const position = 12 + y + (bend * y * y) / span + 0.02 * layout.pitch * normal() + shift;
    const light = 8e4 * (1 + 0.1 * normal());
    const isSeen = lit.has(i + 1) && position > 1 && position < span + 22;
    return isSeen ? [{ position, light, truth: i + 1 }] : [];
  });
}
