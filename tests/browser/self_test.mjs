// No check that cannot fail: a sound page holds, and each broken copy of it is found out.

import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";

import { start } from "./browser.mjs";
import { check } from "./checks.mjs";

const SCRIPT = `
for (const box of document.querySelectorAll("input[data-filter-for]")) {
  const rows = [...document.getElementById(box.dataset.filterFor).tBodies[0].rows];
  box.addEventListener("input", () => rows.forEach((row) => (row.hidden = !row.textContent.toLowerCase().includes(box.value.toLowerCase()))));
}
for (const button of document.querySelectorAll("button[data-sort]")) button.addEventListener("click", () => {
  const head = button.parentElement, body = head.closest("table").tBodies[0], up = head.getAttribute("aria-sort") !== "ascending";
  head.setAttribute("aria-sort", up ? "ascending" : "descending");
  body.append(...[...body.rows].sort((a, b) => (up ? 1 : -1) * (Number(a.cells[0].innerText) - Number(b.cells[0].innerText))));
});`;
const SOUND = `<!DOCTYPE html><html lang="en"><head><meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; style-src 'self-test'; script-src 'self-test'">
<title>sound</title><style>body{color:#111;background:#fff}@media print{figure{break-inside:avoid}tr[hidden]{display:table-row}}</style></head>
<body><main><h1>Sound</h1><label for="box">Filter</label><input id="box" data-filter-for="rows">
<table id="rows"><thead><tr><th scope="col"><button data-sort>Figure</button></th></tr></thead>
<tbody><tr><td>3</td></tr><tr><td>1</td></tr><tr><td>22</td></tr></tbody></table>
<figure><svg role="img" aria-label="a picture" width="100" height="20"></svg></figure></main><script>${SCRIPT}</script></body></html>`;

// The policy of the sound page must let its parts run: their hashes stand in for the placeholders.
const { createHash } = await import("node:crypto");
const sealed = (html) => {
  const hash = (text) => `sha256-${createHash("sha256").update(text).digest("base64")}`;
  const part = (tag) => new RegExp(`<${tag}>([^]*?)</${tag}>`).exec(html)?.[1] ?? "";
  return html.replace("style-src 'self-test'", `style-src '${hash(part("style"))}'`).replace("script-src 'self-test'", `script-src '${hash(part("script"))}'`);
};

const BROKEN = [
  ["console", (html) => html.replace("</script>", "console.error('no');</script>")],
  ["exception", (html) => html.replace("</script>", "throw new Error('no');</script>")],
  ["request", (html) => html.replace("default-src 'none'", "default-src 'none'; img-src http:").replace("<h1>", '<img alt="x" src="http://192.0.2.1/x.png"><h1>')],
  ["policy", (html) => html.replace(/<meta http-equiv[^>]*>/, "")],
  ["360", (html) => html.replace("<h1>", '<p class="w">wide</p><h1>').replace("</style>", ".w{width:700px}</style>")],
  ["accessibility", (html) => html.replace("color:#111", "color:#ccc")],
  ["filter", (html) => html.replace("row.hidden = !", "row.hidden = !!0 && !")],
  ["filter", (html) => html.replace("up ? 1 : -1", "1")],
  ["paper: a filter hides", (html) => html.replace("tr[hidden]{display:table-row}", "")],
  ["is cut on paper", (html) => html.replace('width="100" height="20"', 'width="9000" height="20"').replace("figure{break-inside", "main{overflow:hidden}figure{break-inside")],
  ["paper: a figure may break", (html) => html.replace("figure{break-inside:avoid}", "")],
  ["content", (html) => html.replace("<h1>", '<a href="javascript:alert(1)">x</a><h1>')],
  ["dialog", (html) => html.replace("</script>", "alert('no');</script>")],
];

const folder = mkdtempSync(join(tmpdir(), "thornmap-self-test-"));
const browser = await start();
let missed = 0;
try {
  const faults = async (html) => {
    const file = join(folder, "page.html");
    writeFileSync(file, sealed(html));
    return (await check(browser, file)).wrong;
  };
  const sound = await faults(SOUND);
  if (sound.length) {
    console.log("the sound page is said to be broken:", sound);
    missed += 1;
  }
  for (const [wanted, broken] of BROKEN) {
    const html = broken(SOUND);
    const found = html === SOUND ? [] : await faults(html);
    const hit = found.some((fault) => fault.toLowerCase().includes(wanted));
    if (!hit) {
      console.log(`not found out: ${wanted}; found ${JSON.stringify(found)}`);
      missed += 1;
    }
  }
  console.log(`${BROKEN.length} broken pages, ${missed} not found out`);
} finally {
  await browser.close();
  rmSync(folder, { recursive: true, force: true });
}
process.exit(missed ? 1 : 0);
