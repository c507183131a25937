/** Fibre flats to tramlines.fits. */
import { basename } from "node:path";
import { oneOfEach } from "../oneOfEach.js";
import { countFibres, medianFwhm } from "../report/summary.js";
import { writeTramlines } from "../tramlines/file.js";
import { traceFlatFiles } from "../tramlines/flatFiles.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import { correctionLines, openCorrection } from "./correction.js";
import type { Facts, Job } from "./task.js";

interface Options {
  version: string;
  profile: ProfileKind | "auto";
}

export async function makeTramlines(job: Job): Promise<Facts> {
  const { version, profile } = job.options as unknown as Options;
  const correction = await openCorrection(job);
  const flats = job.inputs.flat.map(({ path }) => path);
  const traced = await traceFlatFiles(flats, correction, { profile, hdu: correction.hdu });
  const { tracing, tramlines, header } = traced;
  const lines = [...flats.map((path) => `flat ${basename(path)}`), `profile ${profile}`, ...correctionLines(job)];
  await writeTramlines(job.products[0], tramlines, { version, options: lines, inputs: correction.inputs, header });
  const { positions, lit, dim, dead } = countFibres(tramlines);
  return {
    flats: flats.map((path) => basename(path)),
    fibres: { positions, lit, dim, dead },
    rmsPixels: tracing.rms,
    naming: tracing.naming.readings,
    profile: tramlines.profile.kind,
    medianFwhmPixels: medianFwhm(tramlines),
    assumptions: oneOfEach(traced.assumptions),
    warnings: oneOfEach(traced.warnings),
  };
}
