/** The public surface, name by name: whoever changes it changes this list too, knowingly. */
import { readFileSync } from "node:fs";
import ts from "typescript";
import { describe, expect, test } from "vitest";
import * as library from "../src/index.js";

const VALUES = `
  CalibrationError DetectorError FitsError Flag Header MaskBit NamingError SCENES SKY_LINES SceneError
  SpectrographError TraceError UNUSABLE airToVacuum calibrateSpectra calibratedHdus calibrationCards
  checkGeometry chooseProfile columnAt combineSpectra combinedHdus compareMethods correctFrame countFibres
  crosstalkHdus crowdedLines detectorHdus dispersionAt ecsvText encodeFits extractFrame fibreTables
  findPairHits formatSection fwhmAt gridWavelength historyCards identify inputCards joinLines lampLines
  listHdus loadCalibrations loadKernels lookAt makeCalibrations makeGrid measureCrosstalk measureNoise
  measureSingleFibre measureThroughput measureWavelengths measureZeroPoint medianFwhm medianSignalToNoise
  neglectedShare noCalibrations noiseWarnings parseLineFile parseScene parseSection parseSpectrograph
  readDetector readImage readLineFile readPositions readProduct readScene readSpectra readSpectrograph
  readTable readThroughput readTramlines readWavelengths rebinSpectra rebinnedHdus recoverInjected
  rejectedHdu requireSameGeometry scatteredHdu scoreByDecade scoreCosmicRays scoreLeak scoreTrace
  sectionSize seenHdu simulateExposure simulationFiles spectraHdus spectrographToml sumFibres
  summariseSpectra tableHdus targetTables targetsHdu throughputHdus traceFlat tramlineHeights
  tramlinesHdus useThreads vacuumToAir verifyExtraction wavelengthAt wavelengthHdus wavelengthImage
  writeDetector writeExposure writeFits writeObserverFiles writeSimulation writeSpectra writeThroughput
  writeTramlines writeWavelengths zeroPointLines
`;

const TYPES = `
  AmplifierNoise ArcExposure ArcLine ArcPeak ArcResult Calibrated CalibrationFrames CalibrationInput
  CalibrationPaths Calibrations Card CardValue CellScore ChecksumState CombineOptions CombinedSpectra
  Comparison CorrectOptions CosmicScore CosmicTruth CrosstalkMatrix DarkScore DecadeScore
  DetectorFileOptions DetectorGeometry DispersionFit Extraction ExtractionOptions FibreBias FibreCheck
  FibreCounts FibreState Finding FitsColumn FitsErrorCode FitsImage FitsTable FlagCounts Frame FrameList
  FrameShare FrameZeroPoint Frames GaussianProfile GridRequest HduSummary IdentifiablePeak Identification
  LeakScore LineList LoneEstimator LookOptions LookReport Medium Method MethodCheck MethodComparison
  NoiseFrames NoiseIngredients NoiseMeasurement OutputColumn OutputHdu OutputImage PairHits PixelArray
  PixelWavelengths Profile ProfileChoice ProfileKind RawImage ReadOptions RebinOptions RebinnedSpectra
  Recovery RecoveryOptions Role Scene SceneExposure Section SeenLeak SimulatedExposure SimulationFiles
  SimulationOptions SingleFibreCheck Sky SkyLine SlitLayout Spectra SpectraCalibration SpectraFileOptions
  SpectraProduct SpectraSummary SpectralGrid Spectrograph SpectrumTable StackReport StackedFrame
  TableOptions Target TargetSpectra Throughput TraceOptions TraceScore Tracing Tramlines
  TramlinesFileOptions TrueFlux TrueLine Truth Verdict Verification WavelengthFileOptions
  WavelengthSolution WriteOptions
`;

const words = (text: string) => text.trim().split(/\s+/);

/** Types leave no trace when the program runs, so they are read from the text. */
function exportedTypes(): string[] {
  const text = readFileSync(new URL("../src/index.ts", import.meta.url), "utf8");
  const file = ts.createSourceFile("index.ts", text, ts.ScriptTarget.Latest);
  return file.statements.flatMap((statement) => {
    if (!ts.isExportDeclaration(statement) || !statement.exportClause || !ts.isNamedExports(statement.exportClause)) {
      throw new Error("src/index.ts holds something else than named exports.");
    }
    const whole = statement.isTypeOnly;
    return statement.exportClause.elements.flatMap((one) => (whole || one.isTypeOnly ? [one.name.text] : []));
  });
}

describe("the public library", () => {
  test("exports these values", () => {
    expect(Object.keys(library).sort()).toEqual(words(VALUES));
  });

  test("exports these types", () => {
    expect(exportedTypes().sort()).toEqual(words(TYPES));
  });
});
