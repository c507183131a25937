/** Tasks that write their inputs one behind the other: order, reuse, what makes a product anew, and what a failure takes
 * along. The right answers follow from the graph. */
import { appendFileSync, existsSync, mkdirSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { basename, join } from "node:path";
import { afterEach, beforeEach, describe, expect, test } from "vitest";
import { type Ending, Engine } from "../../src/night/engine.js";
import { Ledger } from "../../src/night/ledger.js";
import type { Facts, Job, Task } from "../../src/night/task.js";
import { freshFolder } from "./frames.js";

let folder: string;
let raw: string;
let out: string;

beforeEach(() => {
  folder = freshFolder();
  raw = join(folder, "raw");
  out = join(folder, "out");
  mkdirSync(raw);
  for (const name of ["bias", "flat", "s1", "s2", "s3"]) writeFileSync(join(raw, name), `${name} `);
});
afterEach(() => rmSync(folder, { recursive: true }));

/** detector ← bias; tramlines ← detector, flat; spectra ← detector, tramlines, frame; field ← spectra. */
function tasks(options: { method?: string; name?: string } = {}): Task[] {
  const task = (id: string, file: string[], after: string[], more: object = {}): Task => ({
    ...{ id, stage: "join", label: id, products: [`${id}.txt`], options: null, part: "derived", effort: 1 },
    ...{ inputs: { frame: file.map((name) => join(raw, name)) }, after },
    ...more,
  });
  const spectra = (name: string) =>
    task(`spectra ${name}`, [name], ["detector", "tramlines"], { options: { method: options.method ?? "joint" } });
  return [
    task("detector", ["bias"], []),
    task("tramlines", ["flat"], ["detector"], { effort: 2 }),
    spectra("s1"),
    spectra("s2"),
    spectra("s3"),
    task("field", [], ["spectra s1", "spectra s2"]),
  ];
}

const joinFiles = async ({ inputs, from, products, options }: Job): Promise<Facts> => {
  const text = [...inputs.frame, ...Object.values(from)].map(({ path }) => readFileSync(path, "utf8")).join("+");
  if (text.includes("broken")) throw new Error("the frame is broken; take it again.");
  writeFileSync(products[0], `(${text}${JSON.stringify(options)})`);
  return { length: text.length };
};

interface Run {
  made: string[];
  states: Record<string, Ending["state"]>;
  endings: Map<Task, Ending>;
}

async function run(list: Task[], make = joinFiles, atOnce = 2, program = "1"): Promise<Run> {
  const ledger = Ledger.open(out);
  const made: string[] = [];
  const engine = new Engine({ ledger, program, atOnce, make, onStart: ({ id }) => made.push(id) });
  engine.add(list);
  const endings = await engine.settled();
  ledger.close();
  const states = Object.fromEntries(Array.from(endings, ([{ id }, { state }]) => [id, state]));
  return { made, states, endings };
}

const product = (id: string) => readFileSync(join(out, `${id}.txt`), "utf8");
const ALL = tasks0();
function tasks0() {
  return ["detector", "tramlines", "spectra s1", "spectra s2", "spectra s3", "field"];
}

describe("order", () => {
  test.each([1, 2, 5])("%i at once give the same products, each after what it reads", async (atOnce) => {
    const { made } = await run(tasks(), joinFiles, atOnce);
    expect([...made].sort()).toEqual([...ALL].sort());
    const place = (id: string) => made.indexOf(id);
    for (const { id, after } of tasks()) for (const one of after) expect(place(one)).toBeLessThan(place(id));
    const detector = "(bias null)";
    const tramlines = `(flat +${detector}null)`;
    const spectra = (name: string) => `(${name} +${detector}+${tramlines}{"method":"joint"})`;
    expect(product("field")).toBe(`(${spectra("s1")}+${spectra("s2")}null)`);
    expect(product("spectra s3")).toBe(spectra("s3"));
  });

  test("never more at once than allowed, and as many as that", async () => {
    let atWork = 0;
    const seen: number[] = [];
    const slow = async (job: Job) => {
      seen.push(++atWork);
      await new Promise((resolve) => setTimeout(resolve, 5));
      atWork--;
      return joinFiles(job);
    };
    await run(tasks(), slow, 2);
    expect(Math.max(...seen)).toBe(2);
  });

  test("a task that reads what nobody makes is a defect", async () => {
    const [first] = tasks();
    await expect(run([{ ...first, after: ["nothing"] }])).rejects.toThrow(/reads what nothing makes/);
    Ledger.open(out).close();
  });
});

describe("a second run", () => {
  beforeEach(() => run(tasks()));

  const remade = async (list = tasks()) => (await run(list)).made.sort();

  test("keeps all, with the same facts", async () => {
    const before = readFileSync(join(out, ".hatchel/records/field.json"), "utf8");
    const { made, states, endings } = await run(tasks());
    expect(made).toEqual([]);
    expect(new Set(Object.values(states))).toEqual(new Set(["kept"]));
    expect(readFileSync(join(out, ".hatchel/records/field.json"), "utf8")).toBe(before);
    const [, ending] = [...endings][0];
    expect(ending).toMatchObject({ record: { facts: { length: 5 } } });
  });

  test("makes anew what one byte of one input reaches, and nothing else", async () => {
    appendFileSync(join(raw, "s3"), "x");
    expect(await remade()).toEqual(["spectra s3"]);
    appendFileSync(join(raw, "s1"), "x");
    expect(await remade()).toEqual(["field", "spectra s1"]);
    writeFileSync(join(raw, "flat"), "FLAT ");
    expect(await remade()).toEqual(ALL.filter((id) => id !== "detector").sort());
    appendFileSync(join(raw, "bias"), "x");
    expect(await remade()).toEqual([...ALL].sort());
    expect(await remade()).toEqual([]);
  });

  test("makes anew what an option reaches, and nothing else", async () => {
    expect(await remade(tasks({ method: "boxcar" }))).toEqual(["field", "spectra s1", "spectra s2", "spectra s3"]);
  });

  test("makes all anew with another program", async () => {
    expect((await run(tasks(), joinFiles, 2, "2")).made.sort()).toEqual([...ALL].sort());
  });

  test("stops where a product comes out as it was", async () => {
    const same = async (job: Job) => {
      if (job.products[0].endsWith("detector.txt")) {
        writeFileSync(job.products[0], "(bias null)");
        return {};
      }
      return joinFiles(job);
    };
    writeFileSync(join(raw, "bias"), "bias  ");
    expect((await run(tasks(), same)).made).toEqual(["detector"]);
  });

  test("makes anew a product that was altered, cut or taken away, and one whose record is damaged", async () => {
    const whole = product("tramlines");
    writeFileSync(join(out, "tramlines.txt"), whole.replace("flat", "FLAT"));
    expect(await remade()).toEqual(["tramlines"]);
    expect(product("tramlines")).toBe(whole);
    writeFileSync(join(out, "field.txt"), product("field").slice(0, 9));
    rmSync(join(out, "spectra s3.txt"));
    writeFileSync(join(out, ".hatchel/records/detector.json"), '{"format": 1, "key');
    expect(await remade()).toEqual(["detector", "field", "spectra s3"]);
  });

  test("knows a frame by its bytes and its name, not by its folder or its time", async () => {
    for (const name of ["bias", "flat", "s1", "s2", "s3"]) {
      const text = readFileSync(join(raw, name));
      rmSync(join(raw, name));
      mkdirSync(join(raw, "moved"), { recursive: true });
      writeFileSync(join(raw, "moved", name), text);
    }
    raw = join(raw, "moved");
    expect(await remade()).toEqual([]);
  });
});

describe("a failure", () => {
  test("takes along what reads it, and nothing else", async () => {
    writeFileSync(join(raw, "s1"), "broken");
    const { states, endings } = await run(tasks());
    expect(states).toEqual({
      ...Object.fromEntries(ALL.map((id) => [id, "made"])),
      "spectra s1": "failed",
      field: "not made",
    });
    const field = [...endings].find(([{ id }]) => id === "field")![1];
    expect(field).toMatchObject({ because: { id: "spectra s1" }, reason: "the frame is broken; take it again." });
    expect(existsSync(join(out, "field.txt"))).toBe(false);
  });

  test("of a calibration names itself all the way down", async () => {
    writeFileSync(join(raw, "bias"), "broken");
    const { made, endings } = await run(tasks());
    expect(made).toEqual(["detector"]);
    for (const [{ id }, ending] of endings) {
      if (id !== "detector") expect(ending).toMatchObject({ state: "not made", because: { id: "detector" } });
    }
  });

  test("is tried again, and then all goes on", async () => {
    writeFileSync(join(raw, "s1"), "broken");
    await run(tasks());
    writeFileSync(join(raw, "s1"), "s1 ");
    expect((await run(tasks())).made.sort()).toEqual(["field", "spectra s1"]);
  });

  test("to read an input is told as one", async () => {
    rmSync(join(raw, "s2"));
    const { states } = await run(tasks());
    expect(states["spectra s2"]).toBe("failed");
  });

  test("leaves no half file", async () => {
    const half = async (job: Job) => {
      writeFileSync(job.products[0], "half");
      throw new Error("enough.");
    };
    await run(tasks(), half);
    expect(readdirSync(out)).toEqual([".hatchel"]);
    expect(readdirSync(join(out, ".hatchel"))).toEqual(["records"]);
  });
});

test("a folder of files is kept, checked and swept like a single one", async () => {
  const task: Task = { ...tasks()[0], products: [], folder: "tables" };
  const write = (names: string[]) => async (job: Job) => {
    for (const name of names) writeFileSync(join(job.folder!, name), name);
    return {};
  };
  const files = () => readdirSync(join(out, "tables")).sort();
  await run([task], write(["1", "2"]));
  expect(files()).toEqual(["1", "2"]);
  expect((await run([task], write([]))).made).toEqual([]);
  rmSync(join(out, "tables/2"));
  expect((await run([task], write(["1", "3"]))).made).toEqual(["detector"]);
  expect(files()).toEqual(["1", "3"]);
  appendFileSync(join(raw, "bias"), "x");
  await run([task], write(["3"]));
  expect(files()).toEqual(["3"]);
});

test("an engine that is stopped finishes what runs and begins nothing more", async () => {
  const ledger = Ledger.open(out);
  const made: string[] = [];
  const engine: Engine = new Engine({
    ...{ ledger, program: "1", atOnce: 1 },
    make: async (job) => {
      made.push(basename(job.products[0]));
      if (made.length === 2) engine.stop();
      return joinFiles(job);
    },
  });
  engine.add(tasks());
  const endings = await engine.settled();
  ledger.close();
  expect(made).toEqual(["detector.txt", "tramlines.txt"]);
  expect([...endings.values()].map(({ state }) => state)).toEqual(["made", "made", "left", "left", "left", "left"]);
});

describe("a task that reads what there is of some", () => {
  const some = () => {
    const list = tasks();
    const field = list[list.length - 1];
    return [...list.slice(0, -1), { ...field, after: [], some: ["spectra s1", "spectra s2"] }];
  };

  test("is made of the others when one fails, and not made when all do", async () => {
    writeFileSync(join(raw, "s1"), "broken");
    const { states, made } = await run(some());
    expect(states).toMatchObject({ "spectra s1": "failed", field: "made" });
    expect(made.indexOf("field")).toBeGreaterThan(made.indexOf("spectra s2"));
    expect(product("field")).toBe(`(${product("spectra s2")}null)`);
    writeFileSync(join(raw, "s2"), "broken");
    expect((await run(some())).states.field).toBe("not made");
  });

  test("is not made of fewer than it needs", async () => {
    writeFileSync(join(raw, "s1"), "broken");
    const list = some().map((task) => (task.id === "field" ? { ...task, least: 2 } : task));
    expect((await run(list)).states.field).toBe("not made");
  });

  test("is made anew when the missing one comes", async () => {
    writeFileSync(join(raw, "s1"), "broken");
    await run(some());
    writeFileSync(join(raw, "s1"), "s1 ");
    expect((await run(some())).made.sort()).toEqual(["field", "spectra s1"]);
    expect(product("field")).toBe(`(${product("spectra s1")}+${product("spectra s2")}null)`);
  });
});

test("a task that grows, or whose file is written anew, is done again, with what reads it, and no other", async () => {
  const ledger = Ledger.open(out);
  let made: string[] = [];
  const onStart = ({ id }: Task) => made.push(id);
  const engine = new Engine({ ledger, program: "1", atOnce: 2, make: joinFiles, onStart });
  const all = tasks();
  engine.add(all);
  await engine.settled();
  made = [];
  const field = { ...all[5], after: ["spectra s1", "spectra s2", "spectra s3"] };
  engine.add([...all.slice(0, 5), field]);
  await engine.settled();
  expect(made).toEqual(["field"]);
  made = [];
  appendFileSync(join(raw, "s3"), "more");
  engine.add([...all.slice(0, 5), field], [join(raw, "s3")]);
  await engine.settled();
  expect(made).toEqual(["spectra s3", "field"]);
  expect(product("field")).toContain("s3 more");
  ledger.close();
});

test("tasks that come later find what is there", async () => {
  const ledger = Ledger.open(out);
  const engine = new Engine({ ledger, program: "1", atOnce: 2, make: joinFiles });
  const [detector, tramlines, one] = tasks();
  engine.add([detector, tramlines]);
  await engine.settled();
  engine.add([one]);
  const endings = await engine.settled();
  ledger.close();
  expect([...endings.values()].map(({ state }) => state)).toEqual(["made", "made", "made"]);
});

describe("the folder", () => {
  test("is one run's at a time", () => {
    const ledger = Ledger.open(out);
    // This process holds it; another one would be told so.
    writeFileSync(join(out, ".hatchel/lock"), `${process.ppid}\n`);
    expect(() => Ledger.open(out)).toThrow(/another run \(process \d+\) is at work there; wait for it, or remove/);
    ledger.close();
    expect(existsSync(join(out, ".hatchel/lock"))).toBe(false);
  });

  test("is free again when the run that held it is gone, and loses what that left half-made", () => {
    mkdirSync(join(out, ".hatchel/making/3"), { recursive: true });
    writeFileSync(join(out, ".hatchel/making/3/half.fits"), "half");
    writeFileSync(join(out, ".hatchel/lock"), "999999999\n");
    Ledger.open(out).close();
    expect(readdirSync(join(out, ".hatchel"))).toEqual(["records"]);
  });

  test("must be one", () => {
    writeFileSync(join(folder, "file"), "");
    expect(() => Ledger.open(join(folder, "file"))).toThrow(
      /file: this folder cannot be written to \((EEXIST|ENOTDIR)\); give another one/,
    );
  });
});
