/** A proposal as a TOML file for people: every key with its meaning beside it, those left out as comments. */
import { isAbsolute, relative, sep } from "node:path";
import type { FrameHeader } from "./frameHeader.js";
import { PLAN_KEYS } from "./planKeys.js";
import type { Proposal } from "./proposal.js";

const WIDTH = 100;

/** `home`: the folder that the file will lie in; its paths start there. */
export function planText(proposal: Proposal, home: string): string {
  const { folder, spectrograph, badPixels, hdu, frames, objects, left, warnings } = proposal;
  const seen = (path: string) => relativePath(home, path);
  const roles = {
    bias: frames.bias,
    dark: frames.dark,
    pixel_flat: frames.pixelFlat,
    fibre_flat: frames.fibreFlat,
    arc: frames.arc,
    twilight: frames.twilight,
  };
  return [
    "# A night plan: which frame plays which role, and what is wanted. Proposed from the frames' headers alone: read it through,",
    "# correct what they say wrongly, then 'hatchel run' it. Keys behind a # hold their default.",
    ...warnings.flatMap((sentence) => ["#", ...folded(`Look here: ${sentence}`)]),
    "",
    entry("", "name", quoted(seen(folder) === "." ? "night" : nameOf(folder))),
    entry("", "folder", quoted(seen(folder))),
    spectrograph === undefined
      ? absent("", "spectrograph", '"spectrograph.toml"')
      : entry("", "spectrograph", quoted(seen(spectrograph))),
    badPixels === undefined
      ? absent("", "bad_pixels", '"badmask.fits"')
      : entry("", "bad_pixels", quoted(seen(badPixels))),
    hdu === undefined ? absent("", "hdu", "0") : entry("", "hdu", String(hdu)),
    "",
    "[frames]",
    ...Object.entries(roles).flatMap(([key, list]) => roleLines(key, list)),
    ...(left.length === 0
      ? []
      : ["", "# Without a role:", ...left.map(({ name, why }) => `#   ${name}  (${comment(why)})`)]),
    ...objects.flatMap((object) => ["", ...objectLines(object)]),
    "",
    "[wanted]",
    ...WANTED.map(([key, value]) =>
      key === "wavelengths" && !proposal.wavelengths ? entry("wanted", key, "false") : absent("wanted", key, value),
    ),
    "",
  ].join("\n");
}

/** Keys and their defaults. */
const WANTED: [key: string, value: string][] = [
  ["method", '"joint"'],
  ["crosstalk", "true"],
  ["half_aperture", "2.5"],
  ["precision", '"auto"'],
  ["cosmic_rays", "true"],
  ["refine", "true"],
  ["profile", '"auto"'],
  ["trust_names", "false"],
  ["wavelengths", "true"],
  ["throughput", '"twilight"'],
  ["sky", '"on"'],
  ["combine", "true"],
  ["rebin", '"off"'],
  ["rebin_step", "1.0"],
  ["rebin_range", "[5000, 7000]"],
  ["tables", '"off"'],
];

function entry(table: string, key: string, value: string): string {
  return `${`${key} = ${value}`.padEnd(44)} # ${PLAN_KEYS[table][key].meaning}`;
}

function absent(table: string, key: string, value: string): string {
  return entry(table, key, value)
    .replace(/^/, "# ")
    .replace(/^(# .{44}) {2}/, "$1");
}

function roleLines(key: string, frames: FrameHeader[]): string[] {
  const { meaning } = PLAN_KEYS.frames[key];
  if (frames.length === 0) return [`# ${key} = []  # ${meaning}; none was found`];
  const count = frames.length === 1 ? "1 frame" : `${frames.length} frames`;
  const seconds = key === "bias" ? "" : ` of ${times(frames)}`;
  return [`# ${count}${seconds}: ${meaning}`, ...listLines(key, frames)];
}

function objectLines({ name, frames }: Proposal["objects"][number]): string[] {
  const count = frames.length === 1 ? "1 frame" : `${frames.length} frames`;
  return ["[[object]]", `# ${count} of ${times(frames)}`, `name = ${quoted(name)}`, ...listLines("frames", frames)];
}

/** "900 s", "300 to 900 s". */
function times(frames: FrameHeader[]): string {
  const known = frames.map(({ seconds }) => seconds).filter((value) => !Number.isNaN(value));
  if (known.length === 0) return "unknown exposure time";
  const [least, most] = [Math.min(...known), Math.max(...known)];
  return least === most ? `${least} s` : `${least} to ${most} s`;
}

function listLines(key: string, frames: FrameHeader[]): string[] {
  const names = frames.map(({ name }) => quoted(name));
  const line = `${key} = [${names.join(", ")}]`;
  if (line.length <= WIDTH) return [line];
  const rows = names.reduce<string[]>((rows, name) => {
    const last = rows[rows.length - 1];
    if (last !== undefined && `${last} ${name},`.length <= WIDTH) rows[rows.length - 1] = `${last} ${name},`;
    else rows.push(`  ${name},`);
    return rows;
  }, []);
  return [`${key} = [`, ...rows, "]"];
}

function folded(text: string): string[] {
  return comment(text)
    .split(" ")
    .reduce<string[]>((lines, word) => {
      const last = lines[lines.length - 1];
      if (last !== undefined && last.length + word.length < WIDTH) lines[lines.length - 1] = `${last} ${word}`;
      else lines.push(lines.length === 0 ? `# ${word}` : `#   ${word}`);
      return lines;
    }, []);
}

/** Nothing that would end a comment, or that TOML forbids in one. */
function comment(text: string): string {
  return text.replace(/\p{Cc}/gu, "?");
}

/** A TOML string. */
function quoted(text: string): string {
  return JSON.stringify(text).replace(/\x7f/g, "\\u007F");
}

function nameOf(folder: string): string {
  return folder.split(/[\\/]/).filter(Boolean).slice(-1)[0] ?? "night";
}

/** Within the same tree where that is short; plans move with their frames. */
function relativePath(home: string, path: string): string {
  const seen = relative(home, path);
  const far = isAbsolute(seen) || seen.split(sep).filter((step) => step === "..").length > 3;
  return far ? path : (seen || ".").replaceAll(sep, "/");
}
