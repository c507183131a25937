/** A shape in the tramlines' file: its table, and the flat's word on its coefficients, as images whose names start with
 * PROFILE. */
import type { OutputHdu } from "../../fits/encode.js";
import { FitsError } from "../../fits/errors.js";
import { type FitsImage, readImage } from "../../fits/image.js";
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import type { KnownShape, ShapeProfile } from "../tramlines.js";
import { nSpline } from "./basis.js";
import { nHermiteFunction } from "./hermiteBasis.js";

export function shapeHdus({ shape, known }: ShapeProfile): OutputHdu[] {
  const nShape = known.best.length;
  const packed = new Float64Array((nShape + 1) * nShape);
  packed.set(known.best);
  packed.set(known.information, nShape);
  return [
    {
      kind: "image",
      name: "PROFILE_SHAPE",
      nx: 2 * nShapeTerm,
      ny: shape.n,
      data: shape.values,
      cards: [
        { keyword: "SHSTART", value: shape.start, comment: "[pixel] distance from the centre, first row" },
        { keyword: "SHSTEP", value: shape.step, comment: "[pixel] from row to row" },
        { keyword: "SHWIDTH", value: shape.referenceWidth, comment: "[pixel] sigma at which these are pixels" },
        ...Array.from(shape.centroid, (value, m) => ({
          keyword: `SHCENT${m}`,
          value,
          comment: `[pixel] centroid of term ${m}`,
        })),
        {
          keyword: "COMMENT",
          comment: "Columns: cumulative profile of terms 1, x, P2(x), y, P2(y), xy, width; then slopes.",
        },
      ],
    },
    {
      kind: "image",
      name: "PROFILE_KNOWN",
      nx: nShape,
      ny: nShape + 1,
      data: packed,
      cards: [
        {
          keyword: "COMMENT",
          comment: "First row: coefficients of the shape's functions; then the flat's information on them.",
        },
      ],
    },
  ];
}

/** @throws FitsError when the HDUs are missing or do not fit each other or the profile's kind. */
export async function readShape(
  input: string | Uint8Array,
  name: string | undefined,
  kind: ShapeProfile["kind"],
): Promise<{ shape: ShapeTable; known: KnownShape }> {
  const table = await readImage(input, { hdu: "PROFILE_SHAPE", name });
  const packed = await readImage(input, { hdu: "PROFILE_KNOWN", name });
  const nShape = packed.nx;
  const expected = nShapeTerm * (kind === "hermite" ? nHermiteFunction : nSpline);
  if (table.nx !== 2 * nShapeTerm || packed.ny !== nShape + 1 || nShape !== expected) {
    const finding = `a profile ${kind} of ${table.nx} columns and ${nShape} coefficients, but ${2 * nShapeTerm} and ${expected} are expected`;
    throw new FitsError("data", finding, "trace the flat again", { file: table.name });
  }
  const known = Float64Array.from(packed.data);
  return {
    shape: {
      start: required(table, "SHSTART"),
      step: required(table, "SHSTEP"),
      n: table.ny,
      values: Float64Array.from(table.data),
      referenceWidth: required(table, "SHWIDTH"),
      centroid: Float64Array.from({ length: nShapeTerm }, (_, m) => required(table, `SHCENT${m}`)),
    },
    known: { best: known.slice(0, nShape), information: known.slice(nShape) },
  };
}

function required(image: FitsImage, keyword: string): number {
  const value = image.header.number(keyword);
  if (value !== undefined && Number.isFinite(value)) return value;
  throw new FitsError("card", `${keyword} is missing`, "trace the flat again", { file: image.name, card: keyword });
}
