// What a page must show; each check returns what is wrong with it.

import { writeFileSync } from "node:fs";
import { basename, dirname, join } from "node:path";

import { AXE, open } from "./browser.mjs";

const WIDTHS = [360, 820, 1280];
// A4 less the margins of the page's own style: 210 mm less twice 14 mm, at 96 dots an inch.
const PAPER_WIDTH = Math.round(((210 - 28) / 25.4) * 96);
const PAPER_HEIGHT = Math.round(((297 - 32) / 25.4) * 96);

const POLICY = `
  const policy = document.querySelector('meta[http-equiv="Content-Security-Policy"]')?.content ?? "";
  return /default-src 'none'/.test(policy) && !/unsafe|\\*/.test(policy) ? [] : ["the policy is missing or loose: " + policy];`;

const OVERFLOW = `
  const wide = document.documentElement.scrollWidth, room = document.documentElement.clientWidth;
  return wide > room + 1 ? ["the page is " + wide + " wide in " + room] : [];`;

const FILTER = `
  const wrong = [];
  const boxes = [...document.querySelectorAll("input[data-filter-for]")];
  if (boxes.length === 0) return ["no filterable table"];
  const shows = (row) => getComputedStyle(row).display !== "none";
  for (const box of boxes) {
    const table = document.getElementById(box.dataset.filterFor);
    const rows = [...table.tBodies[0].rows];
    const type = (text) => { box.value = text; box.dispatchEvent(new Event("input", { bubbles: true })); };
    if (box.offsetParent === null) wrong.push("the filter is hidden");
    const word = rows[0].cells[0].innerText.split(/\\s/)[0].toLowerCase();
    for (const text of [word, "nothing holds this"]) {
      type(text);
      const bad = rows.filter((row) => shows(row) !== row.textContent.toLowerCase().includes(text));
      if (bad.length) wrong.push("the filter " + text + " is wrong on " + bad.length + " rows");
    }
    if (rows.some(shows)) wrong.push("a filter that nothing holds leaves rows");
    type("");
    if (!rows.every(shows)) wrong.push("clearing the filter does not bring every row back");
    const buttons = [...table.querySelectorAll("th > button[data-sort]")];
    if (buttons.length === 0) wrong.push("no column can be ordered");
    for (const button of buttons) {
      const head = button.parentElement;
      for (const way of ["ascending", "descending"]) {
        button.click();
        if (head.getAttribute("aria-sort") !== way) wrong.push(head.innerText + ": aria-sort is not " + way);
        // Plain figures, without units and bounds, are held against their own order.
        const cells = [...table.tBodies[0].rows].map((row) => row.cells[head.cellIndex].innerText.trim().replaceAll("\\u2212", "-"));
        const plain = cells.filter((cell) => /^-?\\d+(\\.\\d+)?$/.test(cell)).map(Number);
        const sorted = [...plain].sort((a, b) => (way === "ascending" ? a - b : b - a));
        if (plain.some((value, i) => value !== sorted[i])) wrong.push(head.innerText + " is not " + way);
      }
    }
    type("nothing holds this");
  }
  return wrong;`;

const ON_PAPER = `
  const wrong = [];
  for (const box of document.querySelectorAll("input[data-filter-for]")) {
    const rows = [...document.getElementById(box.dataset.filterFor).tBodies[0].rows];
    if (!rows.every((row) => getComputedStyle(row).display !== "none")) wrong.push("a filter hides rows on paper");
  }
  const room = document.documentElement.clientWidth;
  for (const part of document.querySelectorAll("svg, figure, table")) {
    const box = part.getBoundingClientRect();
    if (box.width && (box.right > room + 1 || box.left < -1)) wrong.push(part.tagName + " " + (part.id || part.innerText?.slice(0, 20).replaceAll("\\n", " ") || "") + " is cut on paper: " + Math.round(box.right) + " of " + room);
  }
  for (const figure of document.querySelectorAll("figure")) {
    const style = getComputedStyle(figure);
    if (figure.getBoundingClientRect().height < ${PAPER_HEIGHT} && style.breakInside !== "avoid") wrong.push("a figure may break over two sheets");
  }
  return wrong;`;

const INJECTED = `
  const wrong = [];
  for (const tag of ["img", "iframe", "object", "embed", "link", "form", "video", "audio"]) {
    const count = document.querySelectorAll(tag).length;
    if (count) wrong.push(count + " of " + tag);
  }
  if (document.querySelectorAll("script").length > 1) wrong.push("more than one script");
  if (document.querySelectorAll("style").length > 1) wrong.push("more than one style sheet");
  for (const part of document.querySelectorAll("*")) {
    for (const { name, value } of part.attributes) {
      if (/^on/.test(name) || /^\\s*javascript:/i.test(value)) wrong.push(part.tagName + " " + name);
    }
  }
  return wrong;`;

const ACCESSIBLE = `
  const found = await axe.run(document, { resultTypes: ["violations"] });
  return found.violations.map((v) => ({ impact: v.impact, text: v.id + ": " + v.help + " (" + v.nodes.length + ", first " + v.nodes[0].target + ")" }));`;

/** Returns what is wrong with a page, and what is worth saying of it. */
export async function check(browser, file, { shots, isFiltered = true } = {}) {
  const page = await open(browser, file);
  const wrong = [];
  const said = [];
  const note = (where, faults) => wrong.push(...faults.map((fault) => `${where}: ${fault}`));
  note("policy", await page.ask(POLICY));
  note("content", await page.ask(INJECTED));
  for (const scheme of ["light", "dark"]) {
    await page.media("screen", scheme);
    for (const width of WIDTHS) {
      await page.size(width);
      note(`${width} ${scheme}`, await page.ask(OVERFLOW));
      if (shots) {
        const { data } = await page.send("Page.captureScreenshot", { captureBeyondViewport: true, clip: { x: 0, y: 0, width, height: 6000, scale: 1 } });
        const name = `${basename(dirname(file))}-${width}-${scheme}.png`;
        writeFileSync(join(shots, name), Buffer.from(data, "base64"));
      }
    }
    // A narrow page scrolls where a wide one does not.
    for (const width of scheme === "light" ? [WIDTHS[0], WIDTHS.at(-1)] : [WIDTHS.at(-1)]) {
      await page.size(width);
      await page.ask(AXE);
      for (const { impact, text } of await page.ask(ACCESSIBLE)) {
        if (["serious", "critical"].includes(impact)) note(`accessibility ${width} ${scheme}`, [`${impact}: ${text}`]);
        else said.push(`${width} ${scheme}, ${impact}: ${text}`);
      }
    }
  }
  if (isFiltered) note("filter", await page.ask(FILTER));
  await page.size(PAPER_WIDTH);
  await page.media("print", "light");
  note("paper", await page.ask(ON_PAPER));
  const { data } = await page.send("Page.printToPDF", { preferCSSPageSize: true, printBackground: true });
  const sheets = (Buffer.from(data, "base64").toString("latin1").match(/\/Type\s*\/Page\b(?!s)/g) ?? []).length;
  if (sheets < 1) note("paper", ["no sheet was printed"]);
  said.push(`${sheets} sheets of A4`);
  note("console", page.seen.complaints);
  note("request", page.seen.requests);
  note("dialog", page.seen.dialogs);
  await page.close();
  return { wrong, said };
}
