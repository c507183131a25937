import { describe, expect, it } from "vitest";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { NamingError, TraceError } from "../../src/tramlines/errors.js";
import { checkGeometry } from "../../src/tramlines/file.js";
import { type Tracing, traceFlat } from "../../src/tramlines/trace.js";
import { tramlineErrors } from "../../src/tramlines/tramlines.js";
import { type DrawnFlat, drawFlat, type FlatScene, streamOf } from "./flatScene.js";

const layout = { blocks: [12, 11, 13], pitch: 4.9, gap: 4.6, dead: [10, 30], sky: [] };
const scene: FlatScene = { seed: 1, nx: 400, layout, fwhm: 2.45, sag: 8, tilt: 2, light: 20_000 };

/** Distance of the tramlines from the truth over all columns, px. */
function distances({ tramlines }: Tracing, { truth }: DrawnFlat) {
  const nCoef = tramlines.degree + 1;
  const rmsOf = (k: number) => {
    let sum = 0;
    for (let x = 0; x < tramlines.nx; x++) {
      const y = legendreValue(tramlines.legendre, legendreArgument(x, tramlines.nx), k * nCoef, nCoef);
      sum += (y - truth[k][x]) ** 2;
    }
    return Math.sqrt(sum / tramlines.nx);
  };
  const all = truth.map((_, k) => rmsOf(k));
  const seen = all.filter((_, k) => tramlines.state[k] !== "dead");
  const filled = all.filter((_, k) => tramlines.state[k] === "dead");
  return {
    rms: Math.sqrt(seen.reduce((sum, d) => sum + d * d, 0) / seen.length),
    worst: Math.max(...seen),
    worstFilled: Math.max(0, ...filled),
  };
}

const statesOf = ({ tramlines }: Tracing, state: string) =>
  tramlines.state.flatMap((s, k) => (s === state ? [tramlines.fibre[k]] : []));

async function trace(drawn: DrawnFlat, own = layout) {
  const tracing = await traceFlat(drawn.frame, own);
  return { tracing, ...distances(tracing, drawn) };
}

describe("the tramlines' errors", () => {
  it("match the scatter about the truth", async () => {
    const squares: number[] = [];
    for (let seed = 101; seed < 107; seed++) {
      const drawn = drawFlat({ ...scene, seed });
      const { tracing } = await trace(drawn);
      const errors = tramlineErrors(tracing.tramlines);
      const nCoef = tracing.tramlines.degree + 1;
      tracing.tramlines.state.forEach((state, k) => {
        if (state === "dead") return;
        for (let x = 0; x < 400; x += 5) {
          const y = legendreValue(tracing.tramlines.legendre, legendreArgument(x, 400), k * nCoef, nCoef);
          squares.push(((y - drawn.truth[k][x]) / errors[k]) ** 2);
        }
      });
    }
    const mean = squares.reduce((sum, square) => sum + square, 0) / squares.length;
    // 6 flats × 34 fibres, some four free numbers each: the mean of their squares scatters by √(2/816) = 5 %. What is left of
    // the profile's and the degree's own error makes the true scatter up to a quarter larger than the quoted one.
    expect(mean).toBeGreaterThan(0.8);
    expect(mean).toBeLessThan(1.25 ** 2);
  }, 120_000);

  it("are none for a fibre that was filled from its neighbours", async () => {
    const { tracing } = await trace(drawFlat(scene));
    expect(tramlineErrors(tracing.tramlines)[9]).toBeNaN();
  });
});

describe("tracing flats of known truth", () => {
  it("follows Gaussian fibres to a few thousandths of a pixel, widths too", async () => {
    const drawn = drawFlat(scene);
    const { tracing, rms, worst, worstFilled } = await trace(drawn);
    // 20 000 e⁻ in 8 columns centre a Gaussian of σ = 1.04 px to σ/√160 000 = 0.0026 px a group, 50 groups a fibre.
    expect(rms).toBeLessThan(0.003);
    expect(worst).toBeLessThan(0.006);
    expect(worstFilled).toBeLessThan(0.15);
    expect(statesOf(tracing, "dead")).toEqual([10, 30]);
    expect(statesOf(tracing, "dim")).toEqual([]);
    expect([...tracing.tramlines.block].join("")).toBe("111111111111222222222223333333333333");
    expect(tracing.rms).toBeGreaterThan(0.0026);
    expect(tracing.rms).toBeLessThan(0.006);
    const { profile } = tracing.tramlines;
    for (let k = 0; k < 36; k++) {
      expect(Math.abs(profile.sigma[k * (profile.widthDegree + 1)] / drawn.sigma - 1)).toBeLessThan(
        k === 9 || k === 29 ? 0.01 : 0.004,
      );
    }
    expect(profile.relativeError).toBeLessThan(0.004);
    expect([...tracing.tramlines.seenFrom].filter((x) => x !== 0)).toEqual([]);
    expect(tracing.tramlines.seenTo[0]).toBe(399);
    expect(tracing.tramlines.seenTo[9]).toBe(-1);
    expect(tracing.tramlines.rms[9]).toBeNaN();
    expect(tracing.warnings).toEqual([]);
  });

  it("stands on the centroid of skewed, winged light to 0.02 px, and knows that a Gaussian is wrong by some per cent", async () => {
    const { tracing, rms, worst } = await trace(drawFlat({ ...scene, skew: 0.8, wing: 0.05 }));
    expect(rms).toBeLessThan(0.02);
    expect(worst).toBeLessThan(0.03);
    expect(tracing.tramlines.profile.relativeError).toBeGreaterThan(0.005);
    expect(tracing.tramlines.profile.relativeError).toBeLessThan(0.05);
  });

  it("keeps its course over 60 px of sag, up or down, and 40 px of tilt", async () => {
    for (const course of [
      { sag: 60, tilt: 0, nx: 1024 },
      { sag: -60, tilt: 0, nx: 512 },
      { sag: 8, tilt: 40, nx: 400 },
    ]) {
      const { tracing, rms, worst } = await trace(drawFlat({ ...scene, ...course }));
      expect(rms).toBeLessThan(0.006);
      expect(worst).toBeLessThan(0.012);
      expect(statesOf(tracing, "dead")).toEqual([10, 30]);
    }
  });

  it("is not moved by cosmic rays, alone or with a second flat", async () => {
    const drawn = drawFlat({ ...scene, nCosmic: 200, seed: 6 });
    const alone = await trace(drawn);
    expect(alone.worst).toBeLessThan(0.007);
    const second = drawFlat({ ...scene, nCosmic: 200, seed: 6 });
    // The same fibres, other noise and other hits, twice as bright.
    const clean = drawFlat({ ...scene, nCosmic: 150, seed: 6, light: 40_000 });
    const both = await traceFlat([second.frame, clean.frame], layout);
    expect(distances(both, drawn).worst).toBeLessThan(0.006);
    expect(both.rms).toBeLessThan(alone.tracing.rms);
  });

  it("takes window centroids when asked, which stand on the centroid of skewed light at a wide pitch", async () => {
    const wide = { ...layout, pitch: 10, gap: 6 };
    const drawn = drawFlat({ ...scene, layout: wide, skew: 0.9 });
    const joint = distances(await traceFlat(drawn.frame, wide), drawn);
    const centroid = distances(await traceFlat(drawn.frame, wide, { centring: "centroid" }), drawn);
    expect(centroid.rms).toBeLessThan(0.005);
    expect(joint.rms).toBeGreaterThan(2 * centroid.rms);
  });

  it("finds dim fibres, says so, and traces them", async () => {
    const { tracing, worst } = await trace(drawFlat({ ...scene, lightOf: { 3: 0.05, 4: 0.2, 20: 0.06, 36: 0.05 } }));
    expect(statesOf(tracing, "dim")).toEqual([3, 4, 20, 36]);
    expect(statesOf(tracing, "dead")).toEqual([10, 30]);
    expect(worst).toBeLessThan(0.03);
  });

  it("finds dead fibres that are not listed and fills them from their neighbours", async () => {
    const { tracing, worstFilled } = await trace(drawFlat({ ...scene, lightOf: { 1: 0, 17: 0, 18: 0 } }));
    expect(statesOf(tracing, "dead")).toEqual([1, 10, 17, 18, 30]);
    expect(worstFilled).toBeLessThan(0.15);
    expect(tracing.warnings).toEqual([
      "flat: no light in fibres 1, 17–18, not listed as dead in the slit layout; they are taken as dead.",
    ]);
  });

  it("keeps to the neighbours where a fibre's light ends midway", async () => {
    const drawn = drawFlat(scene);
    const { nx, ny, electrons } = drawn.frame;
    // Of the fibres inside a block, the one that stands farthest off the middle between its neighbours.
    const bend = (i: number) => Math.abs(drawn.truth[i][0] - 0.5 * (drawn.truth[i - 1][0] + drawn.truth[i + 1][0]));
    const k = [14, 15, 16, 17, 18, 19, 20].reduce((best, i) => (bend(i) > bend(best) ? i : best));
    expect(bend(k)).toBeGreaterThan(0.05);
    for (let x = 220; x < nx; x++) {
      for (let y = Math.round(drawn.truth[k][x]) - 2; y <= drawn.truth[k][x] + 2 && y < ny; y++)
        electrons[y * nx + x] = 3;
    }
    const { tracing } = await trace(drawn);
    expect(tracing.tramlines.seenFrom[k]).toBe(0);
    expect(Math.abs(tracing.tramlines.seenTo[k] - 219)).toBeLessThan(10);
    const nCoef = tracing.tramlines.degree + 1;
    // Where it was seen the line is its own, not its neighbours' mean, which stands some 0.03 px beside it.
    const seenAt = legendreValue(tracing.tramlines.legendre, legendreArgument(110, nx), k * nCoef, nCoef);
    expect(Math.abs(seenAt - drawn.truth[k][110])).toBeLessThan(0.006);
    const end = legendreValue(tracing.tramlines.legendre, 1, k * nCoef, nCoef);
    expect(Math.abs(end - drawn.truth[k][nx - 1])).toBeLessThan(0.15);
  });

  it("sees where the light begins when the ends of the spectrum are dark", async () => {
    const { tracing } = await trace(drawFlat({ ...scene, spectrum: (x) => (x < 60 ? 0 : 1) }));
    tracing.tramlines.seenFrom.forEach((from, k) => {
      if (tracing.tramlines.state[k] !== "dead") expect(Math.abs(from - 60)).toBeLessThan(9);
    });
  });

  it("gives the same numbers every time, and one's own degree when asked", async () => {
    const drawn = drawFlat({ ...scene, nx: 128 });
    const [first, second] = [await traceFlat(drawn.frame, layout), await traceFlat(drawn.frame, layout)];
    expect(second.tramlines).toEqual(first.tramlines);
    const own = await traceFlat(drawn.frame, layout, { degree: 2 });
    expect([own.degree, own.tramlines.legendre.length]).toEqual([2, 36 * 3]);
  });

  it("numbers what it finds without a layout, and says so", async () => {
    const tracing = await traceFlat(drawFlat({ ...scene, nx: 128 }).frame);
    expect(tracing.tramlines.nFibre).toBe(34);
    expect(tracing.assumptions[0]).toContain(
      "no slit layout was given, so the 34 fibres found are numbered from low y",
    );
  });
});

describe("many damaged flats", () => {
  it("are named rightly or refused, never wrongly, moved or not", async () => {
    let nRight = 0;
    const wrong: string[] = [];
    for (let seed = 1; seed <= 24; seed++) {
      const { uniform } = streamOf(seed);
      const blocks = [6 + Math.floor(5 * uniform()), 6 + Math.floor(5 * uniform()), 6 + Math.floor(5 * uniform())];
      const pitch = 4.5 + 3 * uniform();
      const own = { blocks, pitch, gap: pitch * (0.4 + uniform()), dead: [3 + Math.floor(3 * uniform())], sky: [] };
      const last = blocks[0] + blocks[1] + blocks[2];
      const lightOf: Record<number, number> = {};
      if (seed % 4 === 1) lightOf[1] = 0;
      if (seed % 4 === 2) lightOf[last] = 0;
      if (seed % 4 === 3) for (let i = 0; i < 2; i++) lightOf[blocks[0] + 2 + i] = 0;
      const moved = seed % 3 === 0 ? 0 : (1 + uniform()) * pitch * (uniform() < 0.5 ? -1 : 1);
      const sag = 6 * uniform();
      const drawn = drawFlat({
        ...scene,
        seed,
        nx: 96,
        layout: own,
        sag,
        fwhm: 0.5 * pitch,
        lightOf,
        moved,
        scale: 0.97 + 0.06 * uniform(),
      });
      try {
        const { worst } = await trace(drawn, own);
        if (worst < 0.5) nRight++;
        else wrong.push(`seed ${seed}: a fibre ${worst.toFixed(2)} px from its place`);
      } catch (error) {
        if (!(error instanceof NamingError)) throw error;
      }
    }
    expect(wrong).toEqual([]);
    expect(nRight).toBeGreaterThanOrEqual(18);
  });
});

describe("a flat of wide pitch, 10 px", () => {
  const wide = { blocks: [9, 8, 10], pitch: 10, gap: 6.3, dead: [4], sky: [] };
  it.each([
    ["whole", {}, 0],
    ["first fibre missing", { 1: 0 }, 0],
    ["last fibre missing", { 27: 0 }, 0],
    ["a fifth of the middle block unlit", { 13: 0, 14: 0 }, 0],
    ["moved up by 1.4 pitches", {}, 14],
    ["moved down by 1.9 pitches, the first fibre off the detector", {}, -19],
  ])("%s: named rightly and followed", async (_, lightOf, moved) => {
    const drawn = drawFlat({ ...scene, nx: 200, layout: wide, fwhm: 3.1, sag: 2.5, lightOf, moved });
    const tracing = await traceFlat(drawn.frame, wide);
    const { rms, worst } = distances(tracing, drawn);
    expect(worst).toBeLessThan(0.02);
    expect(rms).toBeLessThan(0.008);
    const dark = [4, ...Object.keys(lightOf).map(Number), ...(moved === -19 ? [1] : [])];
    expect(statesOf(tracing, "dead")).toEqual(dark.sort((a, b) => a - b));
  });
});

describe("frames that are no usable fibre flat", () => {
  const small = { ...scene, nx: 160 };

  it("an arc: light at isolated columns", async () => {
    const arc = drawFlat({ ...small, spectrum: (x) => Math.exp(-0.5 * ((((x + 13) % 31) - 15) / 0.9) ** 2) });
    await expect(traceFlat(arc.frame, layout)).rejects.toThrow(
      /^flat: light only at isolated columns \(the median column has \d\.\d % of the brightest ones' contrast\), as in an arc; give a fibre flat/,
    );
  });

  it("the lamp off", async () => {
    await expect(traceFlat(drawFlat({ ...small, light: 0 }).frame, layout)).rejects.toThrow(
      /^flat: there is no light in it/,
    );
  });

  it("saturated", async () => {
    const drawn = drawFlat(small);
    const { electrons, mask } = drawn.frame;
    const at = (share: number) => [...electrons].sort((a, b) => a - b)[Math.floor(share * electrons.length)];
    const few = at(0.9985);
    electrons.forEach((e, i) => {
      mask[i] = e > few ? 2 : 0;
    });
    const { tracing } = await trace(drawn);
    expect(tracing.warnings.join()).toMatch(
      /^flat: \d+\.\d % of the pixels on the tramlines are saturated and were left out/,
    );
    const many = at(0.92);
    electrons.forEach((e, i) => {
      mask[i] = e > many ? 2 : 0;
    });
    await expect(traceFlat(drawn.frame, layout)).rejects.toThrow(
      /% of the pixels on the tramlines are saturated; give a flat of shorter/,
    );
  });

  it("a science frame: very unequal fibres draw a warning", async () => {
    const lightOf = Object.fromEntries(
      Array.from({ length: 36 }, (_, i) => [
        i + 1,
        i === 9 || i === 29 ? 0 : 0.06 + 0.02 * ((i * 7) % 5) + (i % 3 === 0 ? 1 : 0),
      ]),
    );
    const tracing = await traceFlat(drawFlat({ ...small, lightOf }).frame, layout);
    expect(tracing.warnings.join()).toMatch(/its fibres are very unequal .* as in a science frame/);
  });

  it("flats of two readout windows, and a frame of another than the tramlines'", async () => {
    const drawn = drawFlat(small);
    const other = drawFlat({ ...small, nx: 150 });
    await expect(traceFlat([drawn.frame, other.frame], layout)).rejects.toThrow(
      /^flat: 150 × \d+ pixels of readout window .* but flat has 160 × .*; flats must come from the same readout window\.$/,
    );
    const { tracing } = await trace(drawn);
    expect(() => checkGeometry(other.frame, tracing.tramlines)).toThrow(TraceError);
    expect(() => checkGeometry(other.frame, tracing.tramlines, "t.fits")).toThrow(
      /^flat: 150 × \d+ pixels, but t\.fits belong to 160 × \d+; trace a flat from the same readout window as the frame\.$/,
    );
  });
});
