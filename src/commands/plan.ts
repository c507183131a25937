/** hatchel plan: a folder of frames to a night plan. */
import { dirname, resolve } from "node:path";
import type { Command } from "commander";
import { planText } from "../night/planText.js";
import { type Proposal, proposePlan } from "../night/proposal.js";
import { addCommonOptions, forceOption, hduOption, outputOption } from "./frameOptions.js";
import { checkOutput, writeText } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import { counted, textPairs } from "./textTable.js";

interface PlanOptions extends CommonOptions {
  output: string;
  hdu?: number;
  force?: boolean;
}

export function addPlan(command: Command): void {
  command
    .description("Proposes a night plan from the headers of the frames in a folder, and says what they do not tell.")
    .argument("<FOLDER>", "the folder that the raw frames lie in")
    .addOption(outputOption("plan").makeOptionMandatory())
    .addOption(hduOption())
    .addOption(forceOption());
  addCommonOptions(command).action((folder: string, options: PlanOptions) =>
    perform("plan", options, () => plan(folder, options)),
  );
}

async function plan(folder: string, { output, hdu, force }: PlanOptions): Promise<Outcome<"plan">> {
  if (output !== "-") checkOutput(output, { force });
  const proposal = await proposePlan(folder, hdu === undefined ? {} : { hdu });
  const text = planText(proposal, output === "-" ? process.cwd() : dirname(resolve(output)));
  if (output === "-") process.stdout.write(text);
  else writeText(output, text, { force });
  const { assumptions, warnings } = proposal;
  return { json: { output, ...planJson(proposal), assumptions, warnings }, text: page(output, folder, proposal) };
}

function planJson({ folder, spectrograph, badPixels, frames, objects, left }: Proposal) {
  const names = (list: { name: string }[]) => list.map(({ name }) => name);
  const { bias, dark, pixelFlat, fibreFlat, arc, twilight } = frames;
  return {
    folder,
    spectrograph: spectrograph ?? null,
    badPixels: badPixels ?? null,
    frames: {
      bias: names(bias),
      dark: names(dark),
      pixelFlat: names(pixelFlat),
      fibreFlat: names(fibreFlat),
      arc: names(arc),
      twilight: names(twilight),
    },
    objects: objects.map((object) => ({ name: object.name, frames: names(object.frames) })),
    left,
  };
}

function page(output: string, folder: string, { frames, objects, left }: Proposal): string {
  const roles = { ...frames };
  const words = {
    bias: "bias",
    dark: "dark",
    pixelFlat: "pixel flat",
    fibreFlat: "fibre flat",
    arc: "arc",
    twilight: "twilight",
  };
  const rows = Object.entries(words).map(([role, word]): [string, string] => {
    const list = roles[role as keyof typeof roles];
    return [word, list.length === 0 ? "none" : counted(list.length, "frame")];
  });
  for (const { name, frames: list } of objects) rows.push(["object", `${name}: ${counted(list.length, "frame")}`]);
  if (left.length > 0) rows.push(["without a role", left.map(({ name }) => name).join(", ")]);
  const where = output === "-" ? "standard output" : output;
  const next = output === "-" ? "" : `\nRead it through; then: hatchel run ${output} -o DIR`;
  return `${where}: a plan for the frames in ${folder}\n${textPairs(rows)}${next}`;
}
