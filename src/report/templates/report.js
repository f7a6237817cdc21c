"use strict";
// Filter and order of the table; on paper and without this script every row stands as it was written.
const units = { GHz: 1e9, MHz: 1e6, kHz: 1e3, Hz: 1, mHz: 1e-3 };
const figure = (text) => {
  const found = /([-\u2212]?\d[\d.]*(?:e[-\u2212]?\d+)?)\s*([GMkm]?Hz)?/.exec(text);
  return found ? Number(found[1].replaceAll("\u2212", "-")) * (units[found[2]] ?? 1) : null;
};
for (const box of document.querySelectorAll("input[data-filter-for]")) {
  const table = document.getElementById(box.dataset.filterFor);
  const said = document.getElementById(table.dataset.said);
  const rows = [...table.tBodies[0].rows].map((row) => [row, row.textContent.toLowerCase()]);
  box.closest(".tools").hidden = false;
  box.addEventListener("input", () => {
    const words = box.value.toLowerCase().split(/\s+/).filter((word) => word);
    let shown = 0;
    for (const [row, text] of rows) {
      row.hidden = !words.every((word) => text.includes(word));
      shown += row.hidden ? 0 : 1;
    }
    said.value = words.length ? `${shown} of ${rows.length}` : "";
  });
}
for (const button of document.querySelectorAll("th > button[data-sort]")) {
  const head = button.parentElement;
  button.addEventListener("click", () => {
    const table = head.closest("table");
    const rising = head.getAttribute("aria-sort") !== "ascending";
    for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
    head.setAttribute("aria-sort", rising ? "ascending" : "descending");
    const keyed = [...table.tBodies[0].rows].map((row) => {
      const text = row.cells[head.cellIndex].textContent.trim();
      return { row, text, number: /^[^A-Za-z]*\d/.test(text) ? figure(text) : null };
    });
    // What has no figure stands last, whichever way the others go.
    keyed.sort((a, b) => {
      if (a.number !== null && b.number !== null) return rising ? a.number - b.number : b.number - a.number;
      if (a.number !== null || b.number !== null) return a.number === null ? 1 : -1;
      return (rising ? 1 : -1) * a.text.localeCompare(b.text);
    });
    table.tBodies[0].append(...keyed.map((one) => one.row));
  });
}
