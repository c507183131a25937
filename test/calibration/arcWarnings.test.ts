/** Each warning on an arc where its cause is met, and none where nothing is wrong. Invented data. */
import { describe, expect, it } from "vitest";
import type { ArcLine } from "../../src/calibration/arc.js";
import { arcWarnings, rmsOf } from "../../src/calibration/arcWarnings.js";

type Facts = Parameters<typeof arcWarnings>[0];
type Exposures = Parameters<typeof arcWarnings>[1];

const nFibre = 6;
const nx = 1000;

function factsOf(nLine = 10, residual = 0.04) {
  const line = (fibre: number, row: number) =>
    ({ fibre, exposure: 0, line: row, residual: row % 2 ? residual : -residual, used: true, why: "" }) as ArcLine;
  return {
    solution: {
      nx,
      rms: new Float64Array(nFibre).fill(residual),
      nLine: new Int32Array(nFibre).fill(nLine),
      seenFrom: new Float64Array(nFibre).fill(30),
      seenTo: new Float64Array(nFibre).fill(950),
    },
    fit: { filled: [] as number[], dropped: [] as Facts["fit"]["dropped"], exposure: Float64Array.of(0, 0.4) },
    lines: Array.from({ length: nFibre * nLine }, (_, i) => line(Math.floor(i / nLine), i % nLine)),
    list: { wavelength: Float64Array.of(6143.063, 6402.248), lamp: ["Ne", "Ne"] },
    identification: { reversed: false, warnings: [] as string[] },
  };
}

const exposures = [{ name: "arc_01" }, { name: "arc_02" }] as unknown as Exposures;
const said = (facts: ReturnType<typeof factsOf>, range: [number, number] = [5800, 7400]) =>
  arcWarnings(facts as unknown as Facts, exposures, range);

describe("warnings on an arc", () => {
  it("are none on a sound one, with one fibre twice as bad and no line on the outermost tenth", () => {
    const facts = factsOf();
    facts.solution.rms[3] = 0.1;
    facts.solution.seenFrom.fill(99);
    facts.solution.seenTo.fill(901);
    expect(said(facts)).toEqual([]);
  });

  it("pass on what the identification found, and say that the range runs the wrong way, either way", () => {
    const facts = factsOf();
    facts.identification = { reversed: true, warnings: ["the range is off."] };
    const sentence = "with the column, the other way round than the range";
    expect(said(facts)).toEqual([
      "arc_01, arc_02: the range is off.",
      `arc_01, arc_02: wavelength falls ${sentence} 5800 to 7400 Å says; correct 'range' under [wavelength].`,
    ]);
    expect(said(facts, [7400, 5800])[1]).toContain(`wavelength rises ${sentence} 7400 to 5800 Å says`);
  });

  it("count the lines of the list that are used, not the points", () => {
    expect(said(factsOf(8))).toEqual([]);
    expect(said(factsOf(7))).toEqual([
      "arc_01, arc_02: only 7 lines carry the wavelength scale; it may be wrong between them by more than its rms says; use more lamps or longer exposures.",
    ]);
    const unused = factsOf(8);
    for (const one of unused.lines) if (one.line === 3) one.used = false;
    expect(said(unused)[0]).toContain("only 7 lines");
  });

  it("name the columns, from 1, beyond which no fibre with lines has any", () => {
    const facts = factsOf();
    facts.solution.seenFrom.fill(180);
    facts.solution.seenTo.fill(700);
    facts.solution.seenTo[2] = 840;
    // Without lines of its own: filled, its columns are a neighbour's.
    facts.solution.nLine[5] = 0;
    facts.solution.seenFrom[5] = 0;
    expect(said(facts)).toEqual([
      "arc_01, arc_02: no line beyond columns 181 to 841 of 1000: wavelengths out there are extrapolated; more lamps would help.",
    ]);
    facts.solution.seenFrom[1] = 90;
    expect(said(facts)).toHaveLength(1);
    facts.solution.seenTo[1] = 990;
    expect(said(facts)).toEqual([]);
  });

  it("name a poor fit, filled fibres and odd ones, from 1", () => {
    expect(said(factsOf(10, 0.1234))).toEqual([
      "arc_01, arc_02: the lines scatter by 0.123 px about the wavelength scale; 0.05 px is usual.",
    ]);
    const facts = factsOf();
    facts.fit.filled = [1, 4];
    facts.solution.rms[0] = 0.13;
    facts.solution.rms[5] = 0.5;
    expect(said(facts)).toEqual([
      "arc_01, arc_02: fibres 2, 5 had too few lines; their wavelengths come from their neighbours', and their own offset is unknown.",
      "arc_01, arc_02: lines scatter much more than elsewhere in fibres 1, 6.",
    ]);
    facts.fit.filled = [4];
    expect(said(facts)[0]).toContain("arc_02: fibre 5 had too few lines;");
    // Thrice a scatter that is next to nothing is no reason for a word.
    const fine = factsOf(10, 0.004);
    fine.solution.rms[2] = 0.045;
    expect(said(fine)).toEqual([]);
  });

  it("give the sign of a line that all fibres have elsewhere, and the exposure that moved", () => {
    const facts = factsOf();
    facts.fit.dropped = [
      { line: 1, off: -0.0512, nFibre: 5 },
      { line: 0, off: 0.2, nFibre: 6 },
    ];
    facts.fit.exposure[1] = -0.62;
    expect(said(facts)).toEqual([
      "arc_01, arc_02: Ne 6402.248 Å was seen at −0.051 Å in 5 fibres alike, and is left out: another line, a blend, or a wrong wavelength in the list.",
      "arc_01, arc_02: Ne 6143.063 Å was seen at +0.200 Å in 6 fibres alike, and is left out: another line, a blend, or a wrong wavelength in the list.",
      "arc_02: its lines lie -0.62 px from those of arc_01, which defines the zero; the spectrograph moved, so check frames taken between them.",
    ]);
  });

  it("take the root of the mean square of the lines in use", () => {
    const { lines } = factsOf(2);
    lines.forEach((one, i) => {
      one.residual = i < 2 ? [3, -4][i] : Number.NaN;
      one.used = i < 2;
    });
    expect(rmsOf(lines)).toBeCloseTo(Math.sqrt(12.5), 12);
  });
});
