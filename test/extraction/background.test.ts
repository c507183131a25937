import { describe, expect, it } from "vitest";
import { fitBackground, type GapFit } from "../../src/extraction/background.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { legendreBasis } from "../../src/reference/legendre.js";
import { seeded } from "../scene.js";
import { type FrameScene, frameScene } from "./frames.js";

const [nx, ny] = [320, 260];

/** A surface that a fit of 3 × 5 terms can follow. e⁻ per pixel, between 6 and 32. */
function surface(x: number, y: number): number {
  const [u, v] = [x / (nx - 1) - 0.5, y / (ny - 1) - 0.4];
  return 12 + 9 * u - 7 * v + 14 * u * u + 20 * v * v - 16 * u * v;
}

/** 24 fibres with gaps where some are dead; their light is taken out and the surface put in. */
function gappedScene(dead: number[]): FrameScene {
  const flux = (k: number) => 300 + 40 * k;
  const scene = frameScene({ nx, ny, nFibre: 24, pitch: 10.1, sigma: 1.04, bow: 0.5, background: 0, flux }, dead);
  scene.frame.electrons.forEach((_, i) => {
    scene.frame.electrons[i] += surface(i % nx, Math.floor(i / nx));
  });
  return scene;
}

function value(fit: GapFit, x: number, y: number): number {
  const inX = legendreBasis((2 * x) / (nx - 1) - 1, fit.nX);
  const inY = legendreBasis((2 * y) / (ny - 1) - 1, fit.nY);
  let sum = 0;
  for (let i = 0; i < fit.nX; i++)
    for (let j = 0; j < fit.nY; j++) sum += fit.coefficients[i * fit.nY + j] * inX[i] * inY[j];
  return sum;
}

function worstError(fit: GapFit): number {
  let worst = 0;
  for (let y = 5; y < ny - 5; y += 7) {
    for (let x = 5; x < nx - 5; x += 9) worst = Math.max(worst, Math.abs(value(fit, x, y) - surface(x, y)));
  }
  return worst;
}

describe("background between the fibres", () => {
  it("follows a known surface under the fibres to 1 e⁻, with rays, a ghost and bad pixels in the gaps", () => {
    const { frame, tramlines } = gappedScene([4, 5, 11, 17, 18]);
    const next = seeded(9);
    for (let i = 0; i < nx * ny; i++) {
      if (next() < 0.01) frame.electrons[i] += 5000 * next();
      if (next() < 0.01) frame.mask[i] = 1;
      if (frame.mask[i]) frame.electrons[i] = Number.NaN;
    }
    for (let y = 112; y < 126; y++) {
      for (let x = 90; x < 150; x++) frame.electrons[y * nx + x] += 300; // too broad for a median to drop
    }
    const fit = fitBackground(frame, tramlines);
    expect([fit.nX, fit.nY]).toEqual([3, 5]);
    expect(fit.warnings).toEqual([]);
    // A median of 16 pixels of 3.1 e⁻ read noise and some 12 e⁻ of photons scatters by √(π/2·22/16) = 1.4 e⁻.
    expect(fit.rms).toBeGreaterThan(0.8);
    expect(fit.rms).toBeLessThan(2);
    expect(worstError(fit)).toBeLessThan(1);
  });

  it("seen at the slit's ends alone does not swing in between", () => {
    const { frame, tramlines } = frameScene({
      nx,
      ny,
      nFibre: 44,
      pitch: 4.9,
      bow: 0.5,
      background: 20,
      flux: () => 400,
    });
    tramlines.legendre.forEach((_, i) => {
      if (i % 4 === 0) tramlines.legendre[i] += 13; // fibres from row 20 to 231 …
    });
    const moved = new Float32Array(nx * ny);
    for (let y = 0; y < ny; y++) {
      for (let x = 0; x < nx; x++) moved[y * nx + x] = frame.electrons[((y + ny - 13) % ny) * nx + x]; // … and their light
    }
    const fit = fitBackground({ ...frame, electrons: moved }, tramlines);
    for (let y = 0; y < ny; y += 5) expect(Math.abs(value(fit, 160, y) - 20)).toBeLessThan(0.5);
  });

  it("is 0 with a warning by name where no gap is wide enough", () => {
    const { frame, tramlines } = frameScene({ nx: 64, ny: 92, nFibre: 17, background: 0 });
    // Tramlines that leave no free row: a line every 4.9 px from the first row to the last.
    tramlines.legendre.forEach((_, i) => {
      if (i % 4 === 0) tramlines.legendre[i] = 3 + 5.3 * (i / 4);
    });
    const fit = fitBackground(frame, tramlines);
    expect(fit.warnings).toEqual([
      "scene.fits: no gap between fibres is wide enough to see scattered light in, so none is taken off; faint fibres may hold some.",
    ]);
    expect([...fit.coefficients]).toEqual([0]);
    expect(fit.rms).toBeNaN();
  });

  it("is written under each fibre in a whole extraction, fibres' wings told apart from it", async () => {
    const { frame, tramlines, flux } = gappedScene([4, 5, 11, 17, 18]);
    const { spectra, background } = await extractFrame(frame, tramlines);
    let pulls = 0;
    let n = 0;
    for (let k = 0; k < 24; k++) {
      for (let x = 0; x < nx; x += 3) {
        const i = k * nx + x;
        if (tramlines.state[k] === "dead") expect(spectra.background[i]).toBeNaN();
        else {
          pulls += (spectra.flux[i] - flux[i]) / Math.sqrt(spectra.variance[i]);
          n++;
        }
      }
    }
    expect([background!.nX, background!.nY]).toEqual([5, 6]); // a term for every 48 px, five and seven at the most
    expect(Math.abs(pulls / n)).toBeLessThan(4 / Math.sqrt(n) + 0.05);
  });
});
