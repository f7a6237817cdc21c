// node tests/browser/run.mjs [--shots FOLDER] [--no-filter] report.html…
// --no-filter: pages whose tables are short and are not filtered.

import { mkdirSync } from "node:fs";
import { resolve } from "node:path";

import { start } from "./browser.mjs";
import { check } from "./checks.mjs";

const files = process.argv.slice(2);
const at = files.indexOf("--shots");
const shots = at >= 0 ? resolve(files.splice(at, 2)[1]) : undefined;
const unfiltered = files.indexOf("--no-filter");
if (unfiltered >= 0) files.splice(unfiltered, 1);
if (files.length === 0) {
  console.error("usage: node tests/browser/run.mjs [--shots FOLDER] [--no-filter] report.html…");
  process.exit(2);
}
if (shots) mkdirSync(shots, { recursive: true });
const browser = await start();
let faults = 0;
try {
  for (const file of files) {
    const { wrong, said } = await check(browser, resolve(file), { shots, isFiltered: unfiltered < 0 });
    console.log(`${file}: ${wrong.length === 0 ? "holds" : `${wrong.length} faults`}; ${said.join("; ")}`);
    for (const fault of wrong) console.log(`  ${fault}`);
    faults += wrong.length;
  }
} finally {
  await browser.close();
}
process.exit(faults ? 1 : 0);
