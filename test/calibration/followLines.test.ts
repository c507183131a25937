/** A pattern of lines followed along a bowed slit. Invented data. */
import { describe, expect, it } from "vitest";
import { followLines } from "../../src/calibration/followLines.js";
import type { ArcPeak } from "../../src/calibration/lineCentres.js";
import { openStream } from "../../src/random/streams.js";

const nFibre = 60;
const nx = 800;
const slit = Float64Array.from({ length: nFibre }, (_, k) => (2 * k) / (nFibre - 1) - 1);
const dice = openStream(4, "pattern");
const lines = Float64Array.from({ length: 25 }, (_, i) => 20 + 29 * i + 20 * dice.uniform());

const peak = (x: number): ArcPeak => ({
  ...{ x, error: 0.01, fwhm: 2.2, fwhmError: 0.01, electrons: 1e4, snr: 90, saturated: false, blended: false },
});

/** Moves up to a line's width from fibre to fibre, and more where `jump` says. */
const column = (line: number, k: number, jump = 0) =>
  lines[line] + 30 * slit[k] ** 2 + 2 * slit[k] * (lines[line] / nx) + (k >= 40 ? jump : 0);

describe("following lines", () => {
  it("names them in every fibre, whatever else there is", () => {
    const names: number[][] = [];
    const peaks = Array.from({ length: nFibre }, (_, k) => {
      if (k === 12 || k === 13) return [];
      const own = [...lines.keys()]
        .filter((line) => (line + k) % 7 !== 0)
        .map((line) => ({ line, x: column(line, k) + 0.05 * dice.normal() }));
      const stray = [0, 1].map(() => ({ line: -1, x: nx * dice.uniform() }));
      const all = [...own, ...stray].sort((a, b) => a.x - b.x);
      names[k] = all.map(({ line }) => line);
      return all.map(({ x }) => peak(x));
    });
    const start = 33;
    const matches = names[start].flatMap((line, at) => (line < 0 ? [] : [{ peak: at, line }]));
    const found = followLines(peaks, start, matches, slit, nx, 2.2);
    let [right, wrong, possible] = [0, 0, 0];
    found.forEach((row, k) => {
      row.forEach((line, at) => {
        const isKnown = names[k][at] >= 0 && matches.some((match) => match.line === names[k][at]);
        if (isKnown) possible++;
        if (line >= 0 && line === names[k][at]) right++;
        // A stray within a fraction of a width of a missing line is taken for it.
        else if (line >= 0 && Math.abs(peaks[k][at].x - column(line, k)) > 0.9) wrong++;
      });
    });
    expect(wrong).toBe(0);
    expect(right / possible).toBeGreaterThan(0.98);
  });

  it("does not take lines for their neighbours where the pattern jumps further than it may", () => {
    const peaks = Array.from({ length: nFibre }, (_, k) => [...lines.keys()].map((line) => peak(column(line, k, 40))));
    const matches = [...lines.keys()].map((line) => ({ peak: line, line }));
    const found = followLines(peaks, 20, matches, slit, nx, 2.2);
    expect(Array.from(found[39])).toEqual([...lines.keys()]);
    found.forEach((row, k) => {
      row.forEach((line, at) => {
        if (k >= 40 && line >= 0) expect(line).toBe(at);
      });
    });
  });

  it("leaves out a fibre of nothing but false peaks, as many as may be, and follows a bow of 20 px beyond it", () => {
    const bowed = (line: number, k: number) => lines[line] + 20 * slit[k] ** 2;
    const falseFibre = 30;
    const peaks = Array.from({ length: nFibre }, (_, k) => {
      if (k !== falseFibre) return [...lines.keys()].map((line) => peak(bowed(line, k) + 0.03 * dice.normal()));
      const stray = Array.from({ length: 320 }, () => nx * dice.uniform()).sort((a, b) => a - b);
      return stray.map(peak);
    });
    const matches = [...lines.keys()].map((line) => ({ peak: line, line }));
    followLines(peaks, 5, matches, slit, nx, 2.2).forEach((row, k) => {
      if (k === falseFibre) expect(row.every((line) => line === -1)).toBe(true);
      else expect(Array.from(row), `fibre ${k}`).toEqual([...lines.keys()]);
    });
  });

  it("tells two close lines apart by the others, and by themselves only when nothing else may be meant", () => {
    // 2.6 columns apart: either may lie where the other is expected.
    const pairs = [100, 102.6, 400, 402.6, 700, 702.6];
    const drift = (k: number) => 20 * slit[k] ** 2;
    const start = 20;
    const follow = (all: number[], left: (line: number) => boolean) => {
      const shown = [...all.keys()].filter(left);
      const peaks = Array.from({ length: nFibre }, (_, k) => {
        const seen = k === start + 1 ? shown : [...all.keys()];
        return seen.map((line) => peak(all[line] + drift(k)));
      });
      const matches = [...all.keys()].map((line) => ({ peak: line, line }));
      return { shown, found: followLines(peaks, start, matches, slit, nx, 2.2) };
    };
    // The first of each pair is lost: the second three fit the first three's places as well.
    const alone = follow([...pairs, 250], (line) => line % 2 === 1 || line === 6);
    expect(Array.from(alone.found[start + 1])).toEqual([-1, -1, -1, -1]);
    for (const k of [0, start + 2, nFibre - 1]) expect(Array.from(alone.found[k])).toEqual([0, 1, 2, 3, 4, 5, 6]);
    const helped = follow([...pairs, 250, 300, 520, 610], (line) => line % 2 === 1 || line >= 6);
    expect(Array.from(helped.found[start + 1])).toEqual(helped.shown);
  });
});
