import { readFile } from "node:fs/promises";
import { beforeEach, describe, expect, it, vi } from "vitest";
import { verifyExtraction } from "../../src/extraction/verify.js";
import type { Kernels } from "../../src/kernels/module.js";
import { MaskBit } from "../../src/reference/bits.js";
import { frameScene } from "./frames.js";

/** What `loadKernels` gives instead of the true kernels: the same module with one constant changed. */
let disturbed: Kernels | undefined;

vi.mock(import("../../src/kernels/module.js"), async (importOriginal) => {
  const original = await importOriginal();
  return { ...original, loadKernels: async (source) => disturbed ?? original.loadKernels(source) };
});

/** The kernels with every f64.const `from` (opcode 0x44, then the number) made into `to`. */
async function kernelsWith(from: number, to: number): Promise<Kernels> {
  const { loadKernels } =
    await vi.importActual<typeof import("../../src/kernels/module.js")>("../../src/kernels/module.js");
  const bytes = await readFile(new URL("../../src/kernels/hatchel.wasm", import.meta.url));
  const pattern = Buffer.alloc(9);
  pattern[0] = 0x44;
  pattern.writeDoubleLE(from, 1);
  let at = bytes.indexOf(pattern);
  expect(at).toBeGreaterThan(0);
  for (; at >= 0; at = bytes.indexOf(pattern, at + 9)) bytes.writeDoubleLE(to, at + 1);
  return loadKernels(bytes);
}

/** Fibres of 100 to 20 000 e⁻, hits and a bad column. */
function goodFrame() {
  const scene = frameScene({ nx: 80, flux: (k, x) => 100 * 200 ** Math.abs(Math.sin(k * 2.3)) + x });
  for (let i = 0; i < 10; i++) scene.frame.electrons[(9 + 8 * i) * 80 + 5 + 7 * i] += 4000 + 300 * i;
  for (let y = 0; y < scene.frame.ny; y++) scene.frame.mask[y * 80 + 33] = MaskBit.bad;
  for (let i = 0; i < 10; i++) scene.frame.mask[(8 + 8 * i) * 80 + 61 + i] = MaskBit.bad;
  return scene;
}

beforeEach(() => {
  disturbed = undefined;
});

describe("verification of kernels against the reference", () => {
  it("passes on a good frame, for every method in both precisions, and says by how much", async () => {
    const { frame, tramlines } = goodFrame();
    const { passed, worstWeight, checks } = await verifyExtraction(frame, tramlines);
    expect(checks.map((check) => `${check.method} ${check.crosstalkCorrected} ${check.precision}`)).toEqual([
      ...["joint true f64", "joint true f32", "optimal true f64", "optimal true f32", "optimal false f64"],
      ...["optimal false f32", "boxcar true f64", "boxcar true f32", "boxcar false f64", "boxcar false f32"],
    ]);
    for (const check of checks) {
      expect(check.nPoint).toBeGreaterThan(17 * 70); // 79 columns hold light, less those that differ in a rejection
      expect(check.worstRelative).toBeLessThan(check.precision === "f64" ? 1e-10 : 1e-4);
      expect(check.worstOverBound).toBeLessThan(1);
      expect(check.passed).toBe(true);
      if (check.precision === "f64") expect([check.flagsDiffer, check.rejectedDiffer]).toEqual([0, 0]);
    }
    expect(worstWeight).toBeLessThan(1e-14);
    expect(passed).toBe(true);
  });

  it("fails when the kernels' profiles are wrong by 1e-9, and shows where", async () => {
    disturbed = await kernelsWith(Math.SQRT1_2, Math.SQRT1_2 * (1 + 1e-9));
    const { frame, tramlines } = goodFrame();
    const { passed, worstWeight, checks } = await verifyExtraction(frame, tramlines);
    expect(worstWeight).toBeGreaterThan(1e-10);
    expect(passed).toBe(false);
    expect(checks.filter((check) => check.precision === "f64" && check.passed)).toEqual([]);
  });

  it("fails when fluxes agree but the kernels lose a flag: 0.01 of a profile is noticed at 0.4 only", async () => {
    disturbed = await kernelsWith(0.01, 0.4);
    const { frame, tramlines } = goodFrame();
    const { passed, worstWeight, checks } = await verifyExtraction(frame, tramlines, { cosmicRays: false });
    expect(worstWeight).toBeLessThan(1e-14);
    expect(checks[0].flagsDiffer).toBeGreaterThan(0);
    expect(passed).toBe(false);
  });

  it("refuses a frame from another readout window", async () => {
    const { frame, tramlines } = goodFrame();
    const other = { ...tramlines, geometryDigest: "another" };
    await expect(verifyExtraction(frame, other)).rejects.toThrow(
      "scene.fits: 80 × 97 pixels, but the tramlines belong to 80 × 97 of another readout window (sections, axis or " +
        "binning differ); trace a flat from the same readout window as the frame.",
    );
  });
});
