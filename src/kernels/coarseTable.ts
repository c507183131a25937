/** A table of the cumulative shape as assembly/tableProfile.ts reads it: f32, and no denser than cubics need. */
import { nShapeTerm, type ShapeTable } from "../reference/shape.js";

/** Points of a table per σ: cubics between them err by 1e-6. */
const tableDensity = 8;

/** Every how many points of the table are enough. */
export function tableStride({ step, referenceWidth, n }: ShapeTable): number {
  let stride = 1;
  while (2 * stride * step * tableDensity <= referenceWidth * 1.01 && (n - 1) % (2 * stride) === 0) stride *= 2;
  return stride;
}

/** Every such point: C_0 … C_6, 0, then their slopes times the step. */
export function packTable(table: ShapeTable): Float32Array {
  const stride = tableStride(table);
  const nPoint = (table.n - 1) / stride + 1;
  const packed = new Float32Array(16 * nPoint);
  for (let i = 0; i < nPoint; i++) {
    const row = i * stride * 2 * nShapeTerm;
    for (let m = 0; m < nShapeTerm; m++) {
      packed[16 * i + m] = table.values[row + m];
      packed[16 * i + 8 + m] = table.values[row + nShapeTerm + m] * table.step * stride;
    }
  }
  return packed;
}
