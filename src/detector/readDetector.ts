/** Detector calibrations read back from the file that `detectorFile.ts` writes, to the bit. */
import { createHash } from "node:crypto";
import { basename } from "node:path";
import { FitsError } from "../fits/errors.js";
import type { Header } from "../fits/header.js";
import { type FitsImage, readImage } from "../fits/image.js";
import { readMask } from "../fits/mask.js";
import { withFits } from "../fits/open.js";
import { readTable } from "../fits/table.js";
import type { CalibrationInput, Calibrations, DarkCurrent, StackReport } from "./calibrations.js";
import { DETECTOR_FORMAT, turnedSize, unescaped } from "./detectorFile.js";
import type { DetectorGeometry } from "./frame.js";
import { geometryDigest } from "./geometry.js";
import type { PixelResponse } from "./response.js";
import type { StackedFrame, StackRole } from "./roleStack.js";

/** @throws FitsError when the file is none of detector calibrations, of a newer format, damaged or at odds with itself. */
export async function readDetector(path: string): Promise<Calibrations> {
  const reader = new DetectorReader(path);
  const { header, names, digest } = await reader.open();
  const { gains, zeroLevelAdu, typicalRate, biasPerSecond, scatter, ...place } = await reader.amplifiers(header);
  const { inputs, stacks, clippedShare } = await reader.frames(names.includes("STACKS"));
  const made: Calibrations = {
    ...{ geometry: place.geometry, geometryOf: place.geometryOf, gains, stacks },
    inputs: [{ role: "detector", name: basename(path), checksum: digest }, ...inputs],
    ...(await reader.notes(names.includes("NOTES"))),
  };
  if (names.includes("BIAS")) {
    made.bias = { mean: await reader.single("BIAS"), variance: await reader.single("BIAS_VAR"), clippedShare };
    made.zeroLevelAdu = zeroLevelAdu;
  }
  if (names.includes("DARK")) made.dark = await reader.dark(typicalRate, biasPerSecond[0]);
  if (names.includes("RESPONSE")) {
    made.response = await reader.response(scatter);
    const told = header.text("FLATTOLD");
    if (told === "seams" || told === "gains and seams") made.toldByPixelFlats = told;
  }
  if (names.includes("BAD_PIXELS")) {
    const { nx, ny, pixels } = await readMask(path, { hdu: "BAD_PIXELS" });
    const { name, checksum } = inputs.find(({ role }) => role === "bad pixels") ?? {
      name: basename(path),
      checksum: "",
    };
    made.badPixels = { name, checksum, nx, ny, pixels };
  }
  return made;
}

class DetectorReader {
  private nx = 0;
  private ny = 0;

  constructor(private readonly path: string) {}

  private refusal(finding: string, remedy = "make it again with 'hatchel stack'"): FitsError {
    return new FitsError("data", finding, remedy, { file: this.path });
  }

  /** The primary header, the HDUs' names, and a digest that stands for the whole file. */
  async open(): Promise<{ header: Header; names: string[]; digest: string }> {
    return withFits(this.path, undefined, ({ hdus }) => {
      const { header } = hdus[0];
      const version = header.integer("DETVERS") ?? 0;
      if (version < 1) {
        throw this.refusal("this is no file of detector calibrations", "give one that 'hatchel stack' wrote");
      }
      if (version > DETECTOR_FORMAT) {
        throw this.refusal(`format ${version}, but ${DETECTOR_FORMAT} is the newest known`);
      }
      const sums = hdus.map((hdu) => hdu.header.text("CHECKSUM") ?? "").join("\n");
      const digest = createHash("sha256").update(sums).digest("hex").slice(0, 16);
      return { header, names: hdus.map(({ name }) => name), digest };
    });
  }

  private async table(name: string) {
    const { columns, header, warnings } = await readTable(this.path, name);
    this.refuseDamage(warnings);
    const column = (wanted: string) => {
      const found = columns.find((one) => one.name === wanted);
      if (found === undefined) throw this.refusal(`table ${name} has no column ${wanted}`);
      return found.data;
    };
    return {
      header,
      texts: (wanted: string) => (column(wanted) as string[]).map(unescaped),
      numbers: (wanted: string) => Array.from(column(wanted) as Float64Array),
      logicals: (wanted: string) => Array.from(column(wanted) as boolean[]),
    };
  }

  private refuseDamage(warnings: string[]): void {
    if (warnings.some((text) => text.includes("checksum is wrong"))) {
      throw this.refusal("a checksum is wrong, so the file has been changed or damaged");
    }
  }

  async amplifiers(header: Header) {
    const { texts, numbers, header: own } = await this.table("AMPLIFIERS");
    const whole = (keyword: string) => header.integer(keyword) ?? 0;
    const read: Omit<DetectorGeometry, "digest"> = {
      ...{ axis1: whole("DETAXIS1"), axis2: whole("DETAXIS2"), dispersionAxis: whole("DISPAXIS") === 2 ? 2 : 1 },
      ...{ data: texts("DATA"), place: texts("PLACE"), binning: [whole("DETBIN1"), whole("DETBIN2")] },
    };
    const geometry = { ...read, digest: geometryDigest(read) };
    if (geometry.digest !== header.text("DETGEOM"))
      throw this.refusal("its readout's digest is not that of its sections");
    [this.nx, this.ny] = turnedSize(geometry);
    return {
      ...{ geometry, geometryOf: unescaped(own.text("GEOMOF") ?? ""), gains: numbers("GAIN") },
      ...{ zeroLevelAdu: numbers("ZERO_LEVEL"), typicalRate: numbers("DARK_TYPICAL") },
      ...{ biasPerSecond: numbers("BIAS_PER_SECOND"), scatter: numbers("RESPONSE_SCATTER") },
    };
  }

  async frames(withStacks: boolean) {
    const { texts, numbers, logicals } = await this.table("FRAMES");
    const [names, checksums, reasons] = [texts("NAME"), texts("CHECKSUM"), texts("REASON")];
    const [levels, noises, clipped] = [numbers("LEVEL"), numbers("NOISE"), numbers("CLIPPED")];
    const used = logicals("USED");
    const rows = texts("ROLE").map((role, i) => {
      const told = { name: names[i], checksum: checksums[i], used: used[i] === true };
      const figures = { level: levels[i], noise: noises[i], clippedShare: clipped[i] };
      const frame: StackedFrame = { ...told, ...figures, ...(reasons[i] === "" ? {} : { reason: reasons[i] }) };
      return { role: role as CalibrationInput["role"], frame };
    });
    const inputs = rows
      .filter(({ frame }) => frame.used)
      .map(({ role, frame }) => ({ role, name: frame.name, checksum: frame.checksum }));
    const ofRole = (role: string) => rows.filter((row) => row.role === role).map(({ frame }) => frame);
    return {
      inputs,
      stacks: withStacks ? await this.stacks(ofRole) : [],
      clippedShare: ofRole("bias")
        .filter((frame) => frame.used)
        .map((frame) => frame.clippedShare),
    };
  }

  private async stacks(framesOf: (role: string) => StackedFrame[]): Promise<StackReport[]> {
    const { texts, numbers } = await this.table("STACKS");
    const [level, noise] = [numbers("LEVEL"), numbers("NOISE")];
    return texts("ROLE").map((role, i) => {
      return { role: role as StackRole, frames: framesOf(role), level: level[i], noise: noise[i] };
    });
  }

  async notes(areThere: boolean): Promise<{ assumptions: string[]; warnings: string[] }> {
    if (!areThere) return { assumptions: [], warnings: [] };
    const { texts } = await this.table("NOTES");
    const [kind, text] = [texts("KIND"), texts("TEXT")];
    const ofKind = (wanted: string) => text.filter((_, i) => kind[i] === wanted);
    return { assumptions: ofKind("assumed"), warnings: ofKind("warning") };
  }

  private async image(hdu: string): Promise<FitsImage> {
    const image = await readImage(this.path, { hdu });
    this.refuseDamage(image.warnings);
    if (image.nx === this.nx && image.ny === this.ny) return image;
    throw this.refusal(`${hdu} has ${image.nx} × ${image.ny} pixels, but its readout ${this.nx} × ${this.ny}`);
  }

  async single(hdu: string): Promise<Float32Array> {
    const { data } = await this.image(hdu);
    return data instanceof Float32Array ? data : Float32Array.from(data);
  }

  private async bytes(hdu: string): Promise<Uint8Array> {
    return new Uint8Array((await this.image(hdu)).data);
  }

  async dark(typicalRate: number[], biasPerSecond: number): Promise<DarkCurrent> {
    const [rate, rateVariance] = [await this.single("DARK"), await this.single("DARK_VAR")];
    return { rate, rateVariance, biasPerSecond, own: await this.bytes("DARK_OWN"), typicalRate };
  }

  async response(scatter: number[]): Promise<PixelResponse> {
    const [response, relativeVariance] = [await this.single("RESPONSE"), await this.single("RESPONSE_RELVAR")];
    return { response, relativeVariance, unusable: await this.bytes("RESPONSE_UNUSABLE"), scatter };
  }
}
