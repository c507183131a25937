/** A shape's centre is a convention of the splines; tramlines run along the centroid of the whole profile. */

import { LegendreFitter } from "../../kernels/legendre.js";
import type { Kernels } from "../../kernels/module.js";
import { legendreArgument, legendreValue } from "../../reference/legendre.js";
import { centroidOf, nShapeTerm, type ShapeTable, shapeTerms } from "../../reference/shape.js";
import type { Lines } from "../../reference/shapeProfiles.js";

const nSample = 33;

/** The same shape with its centroid told, and tramlines moved onto it: weights stay what they were. */
export function referToCentroid(
  kernels: Kernels,
  lines: Lines,
  table: ShapeTable,
): { lines: Lines; table: ShapeTable } {
  const centred = { ...table, centroid: firstMoments(table) };
  const t = Float64Array.from({ length: nSample }, (_, i) => (2 * i) / (nSample - 1) - 1);
  const unit = new Float64Array(nSample).fill(1);
  const fitter = new LegendreFitter(kernels, nSample, lines.nTrace);
  const trace = lines.trace.slice();
  for (let k = 0; k < lines.nFibre; k++) {
    const offset = t.map((x) => {
      const y = legendreValue(lines.trace, x, k * lines.nTrace, lines.nTrace);
      const width = legendreValue(lines.width, x, k * lines.nWidth, lines.nWidth);
      const terms = shapeTerms(x, legendreArgument(y, lines.ny), width, table.referenceWidth);
      return ((centroidOf(centred, terms) - centroidOf(table, terms)) * width) / table.referenceWidth;
    });
    const fit = fitter.fit(t, offset, unit, lines.nTrace);
    for (let i = 0; i < lines.nTrace; i++) trace[k * lines.nTrace + i] += fit.coef[i];
  }
  return { lines: { ...lines, trace }, table: centred };
}

/** ∫ v c_m(v) dv for every term, by the trapezium rule: the splines vanish smoothly at both ends. */
function firstMoments({ n, start, step, values }: ShapeTable): Float64Array {
  const moments = new Float64Array(nShapeTerm);
  for (let i = 0; i < n; i++) {
    const v = start + i * step;
    for (let m = 0; m < nShapeTerm; m++) moments[m] += v * values[i * 2 * nShapeTerm + nShapeTerm + m] * step;
  }
  return moments;
}
