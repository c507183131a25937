/** Which pixels of which readout: frames, calibrations and tramlines only go together when this agrees. */
import { createHash } from "node:crypto";
import { DetectorError } from "./detectorError.js";
import type { DetectorGeometry } from "./frame.js";

/** First 16 hexadecimal digits of SHA-1 over every field, so that two readouts differ here when anything differs. */
export function geometryDigest(geometry: Omit<DetectorGeometry, "digest">): string {
  const { axis1, axis2, dispersionAxis, data, place, binning } = geometry;
  const text = JSON.stringify([axis1, axis2, dispersionAxis, data, place, binning]);
  return createHash("sha1").update(text).digest("hex").slice(0, 16);
}

/** What differs between two readouts, in words; empty when they agree. */
export function geometryDifferences(a: DetectorGeometry, b: DetectorGeometry): string[] {
  const differences: string[] = [];
  const compare = (what: string, of: (geometry: DetectorGeometry) => string) => {
    if (of(a) !== of(b)) differences.push(`${what} ${of(a)} against ${of(b)}`);
  };
  compare("size", ({ axis1, axis2 }) => `${axis1} × ${axis2} pixels`);
  compare("binning", ({ binning }) => binning.join(" × "));
  compare("dispersion along axis", ({ dispersionAxis }) => String(dispersionAxis));
  compare("data sections", ({ data }) => data.join(" "));
  compare("places", ({ place }) => place.join(" "));
  return differences;
}

/** @throws DetectorError when `b` is of another readout than `a`: size, binning, window, sections or axis. */
export function requireSameGeometry(a: DetectorGeometry, nameA: string, b: DetectorGeometry, nameB: string): void {
  if (a.digest === b.digest) return;
  const differences = geometryDifferences(a, b).join("; ");
  throw new DetectorError(
    `${nameA} and ${nameB} come from different readouts (${differences}); use frames of the same binning and window.`,
  );
}
