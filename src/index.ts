/** The public library. */

export { type ArcExposure, type ArcLine, type ArcResult, measureWavelengths } from "./calibration/arc.js";
export { type Calibrated, calibrateSpectra, type SpectraCalibration } from "./calibration/calibrate.js";
export { calibratedHdus, calibrationCards } from "./calibration/calibratedHdus.js";
export { combinedHdus } from "./calibration/combineFile.js";
export {
  type CombinedSpectra,
  type CombineOptions,
  combineSpectra,
  type FrameShare,
} from "./calibration/combineSpectra.js";
export type { DispersionFit } from "./calibration/dispersion.js";
export { CalibrationError } from "./calibration/errors.js";
export { type GridRequest, gridWavelength, makeGrid, type SpectralGrid } from "./calibration/grid.js";
export { type IdentifiablePeak, type Identification, identify } from "./calibration/identify.js";
export { crowdedLines, joinLines, type LineList, lampLines } from "./calibration/lamps.js";
export type { ArcPeak } from "./calibration/lineCentres.js";
export { parseLineFile, readLineFile } from "./calibration/lineFile.js";
export type { Medium } from "./calibration/medium.js";
export { type RebinnedSpectra, type RebinOptions, rebinSpectra } from "./calibration/rebin.js";
export { rebinnedHdus } from "./calibration/rebinFile.js";
export { airToVacuum, vacuumToAir } from "./calibration/refraction.js";
export type { Sky } from "./calibration/sky.js";
export type { FibreCheck } from "./calibration/skyCheck.js";
export { SKY_LINES, type SkyLine, zeroPointLines } from "./calibration/skyLines.js";
export { type PixelWavelengths, readProduct, type SpectraProduct } from "./calibration/spectraProduct.js";
export { measureThroughput, type Throughput } from "./calibration/throughput.js";
export { readThroughput, throughputHdus, writeThroughput } from "./calibration/throughputFile.js";
export {
  readWavelengths,
  type WavelengthFileOptions,
  wavelengthHdus,
  writeWavelengths,
} from "./calibration/wavelengthFile.js";
export {
  columnAt,
  dispersionAt,
  fwhmAt,
  type WavelengthSolution,
  wavelengthAt,
  wavelengthImage,
} from "./calibration/wavelengths.js";
export { type FrameZeroPoint, measureZeroPoint } from "./calibration/zeroPoint.js";
export {
  type CalibrationFrames,
  type CalibrationInput,
  type Calibrations,
  makeCalibrations,
  noCalibrations,
  type StackReport,
} from "./detector/calibrations.js";
export { type CorrectOptions, correctFrame } from "./detector/correct.js";
export { DetectorError } from "./detector/detectorError.js";
export { type DetectorFileOptions, detectorHdus, writeDetector } from "./detector/detectorFile.js";
export { type DetectorGeometry, type Frame, MaskBit, type NoiseIngredients } from "./detector/frame.js";
export type { FrameList, Frames } from "./detector/frameList.js";
export { requireSameGeometry } from "./detector/geometry.js";
export { type CalibrationPaths, loadCalibrations } from "./detector/loadCalibrations.js";
export { type LookOptions, type LookReport, lookAt } from "./detector/look.js";
export { type AmplifierNoise, measureNoise, type NoiseFrames, type NoiseMeasurement } from "./detector/noise.js";
export { noiseWarnings } from "./detector/noiseWarnings.js";
export type { RawImage } from "./detector/raw.js";
export { readDetector } from "./detector/readDetector.js";
export type { StackedFrame } from "./detector/roleStack.js";
export type { Role } from "./detector/roles.js";
export { type Comparison, compareMethods, type MethodComparison } from "./extraction/compare.js";
export { findPairHits, type PairHits } from "./extraction/cosmicPair.js";
export { type CrosstalkMatrix, type LoneEstimator, measureCrosstalk } from "./extraction/crosstalkMatrix.js";
export { type Extraction, extractFrame } from "./extraction/extract.js";
export { crosstalkHdus, rejectedHdu, scatteredHdu, seenHdu, targetsHdu } from "./extraction/extraHdus.js";
export {
  readPositions,
  readSpectra,
  type SpectraFileOptions,
  spectraHdus,
  writeSpectra,
} from "./extraction/file.js";
export type { ExtractionOptions } from "./extraction/options.js";
export {
  type CellScore,
  type DarkScore,
  type FibreBias,
  type Finding,
  type Recovery,
  type RecoveryOptions,
  recoverInjected,
  type Verdict,
} from "./extraction/recover.js";
export { measureSingleFibre, type SeenLeak, type SingleFibreCheck } from "./extraction/singleFibre.js";
export { medianSignalToNoise } from "./extraction/snr.js";
export { Flag, type Method, type Spectra, UNUSABLE } from "./extraction/spectra.js";
export { neglectedShare, sumFibres, type Target, type TargetSpectra } from "./extraction/targets.js";
export { type MethodCheck, type Verification, verifyExtraction } from "./extraction/verify.js";
export { historyCards, inputCards } from "./fits/carry.js";
export { encodeFits, type OutputColumn, type OutputHdu, type OutputImage, type PixelArray } from "./fits/encode.js";
export { FitsError, type FitsErrorCode } from "./fits/errors.js";
export { type Card, type CardValue, Header } from "./fits/header.js";
export { type FitsImage, type ReadOptions, readImage } from "./fits/image.js";
export { type ChecksumState, type HduSummary, listHdus } from "./fits/open.js";
export { formatSection, parseSection, type Section, sectionSize } from "./fits/sections.js";
export { type FitsColumn, type FitsTable, readTable, type TableOptions } from "./fits/table.js";
export { type WriteOptions, writeFits } from "./fits/write.js";
export { loadKernels, useThreads } from "./kernels/module.js";
export { ecsvText, fibreTables, type SpectrumTable, tableHdus, targetTables } from "./report/spectraTables.js";
export {
  countFibres,
  type FibreCounts,
  type FlagCounts,
  medianFwhm,
  type SpectraSummary,
  summariseSpectra,
  tramlineHeights,
} from "./report/summary.js";
export {
  type CosmicScore,
  type CosmicTruth,
  type DecadeScore,
  type LeakScore,
  scoreByDecade,
  scoreCosmicRays,
  scoreLeak,
  scoreTrace,
  type TraceScore,
  type TrueFlux,
} from "./report/truth.js";
export { type SimulatedExposure, simulateExposure, type Truth } from "./simulate/exposure.js";
export {
  type SimulationFiles,
  type SimulationOptions,
  simulationFiles,
  spectrographToml,
  writeExposure,
  writeObserverFiles,
  writeSimulation,
} from "./simulate/files.js";
export { parseScene, readScene, type Scene, type SceneExposure } from "./simulate/scene.js";
export { SceneError } from "./simulate/sceneMessages.js";
export { SCENES } from "./simulate/scenes.js";
export type { TrueLine } from "./simulate/spectra.js";
export { parseSpectrograph, readSpectrograph, type Spectrograph, SpectrographError } from "./spectrograph.js";
export { NamingError, TraceError } from "./tramlines/errors.js";
export {
  checkGeometry,
  readTramlines,
  type TramlinesFileOptions,
  tramlinesHdus,
  writeTramlines,
} from "./tramlines/file.js";
export type { SlitLayout } from "./tramlines/layout.js";
export { chooseProfile, type ProfileChoice, type ProfileKind } from "./tramlines/profiles.js";
export { type TraceOptions, type Tracing, traceFlat } from "./tramlines/trace.js";
export type { FibreState, GaussianProfile, Profile, Tramlines } from "./tramlines/tramlines.js";
