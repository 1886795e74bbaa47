"use strict";
// The table of groups: sorted, filtered and paged in the page itself. Text only ever becomes text nodes.
// Without this script the largest groups stand there, and every table is a stop of the Tab key.

const PAGE_ROWS = 50;
const collator = new Intl.Collator("en", { numeric: true, sensitivity: "base" });

// Order of two values: numbers by size, texts as a person counts; what is missing comes last in either direction.
function compareValues(a, b, ascending) {
  if (a === null || b === null) return (a === null) - (b === null);
  const order = typeof a === "number" && typeof b === "number" ? a - b : collator.compare(String(a), String(b));
  return ascending ? order : -order;
}

// The rows that hold every word somewhere in their texts and at least so many records, in the order of one column;
// equal ones stay in the order they came in.
function arrange(rows, state) {
  const words = state.filter.toLowerCase().split(/\s+/).filter(Boolean);
  const kept = rows.filter((row) => {
    if (state.least > 0 && row[state.recordsColumn] < state.least) return false;
    const text = row.filter((v) => typeof v === "string").join("\n").toLowerCase();
    return words.every((word) => text.includes(word));
  });
  if (state.column === null) return kept;
  return kept
    .map((row, place) => [row, place])
    .sort(([a, i], [b, j]) => compareValues(a[state.column], b[state.column], state.ascending) || i - j)
    .map(([row]) => row);
}

function pageOf(rows, page) {
  const pages = Math.max(1, Math.ceil(rows.length / PAGE_ROWS));
  const shown = Math.min(Math.max(page, 0), pages - 1);
  return { page: shown, pages, rows: rows.slice(shown * PAGE_ROWS, (shown + 1) * PAGE_ROWS) };
}

function cellText(value, digits) {
  if (value === null) return "-";
  if (typeof value !== "number") return value;
  return value.toLocaleString("en", { minimumFractionDigits: digits, maximumFractionDigits: digits });
}

function start() {
  const holder = document.getElementById("groups-data");
  if (!holder) return;
  const data = JSON.parse(holder.textContent);
  const table = document.getElementById("groups-table");
  const heads = [...table.tHead.rows[0].cells];
  const said = document.getElementById("groups-said");
  const [before, after] = ["groups-before", "groups-after"].map((id) => document.getElementById(id));
  // The rows come with the largest groups first.
  const state = { filter: "", least: 0, column: data.records, ascending: false, page: 0, recordsColumn: data.records };

  function draw() {
    const all = arrange(data.rows, state);
    const view = pageOf(all, state.page);
    state.page = view.page;
    const body = document.createElement("tbody");
    for (const row of view.rows) {
      const line = body.insertRow();
      row.forEach((value, i) => {
        const cell = line.insertCell();
        cell.textContent = cellText(value, data.digits[i]);
        if (data.digits[i] !== null) cell.className = "number";
      });
    }
    table.replaceChild(body, table.tBodies[0]);
    heads.forEach((head, i) => {
      head.setAttribute("aria-sort", i !== state.column ? "none" : state.ascending ? "ascending" : "descending");
    });
    said.textContent =
      `${all.length.toLocaleString("en")} of ${data.rows.length.toLocaleString("en")} groups; ` +
      `page ${view.page + 1} of ${view.pages}`;
    // Not `disabled`: the focus stays where it was when the last page is reached.
    before.setAttribute("aria-disabled", view.page === 0);
    after.setAttribute("aria-disabled", view.page === view.pages - 1);
  }

  function turn(pages) {
    state.page += pages;  // `pageOf` keeps it among those there are
    draw();
  }

  heads.forEach((head, i) => {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = head.textContent;
    button.addEventListener("click", () => {
      // A column of numbers starts with the largest, one of texts at its beginning.
      state.ascending = state.column === i ? !state.ascending : data.digits[i] === null;
      state.column = i;
      state.page = 0;
      draw();
    });
    head.replaceChildren(button);
  });
  document.getElementById("groups-filter").addEventListener("input", (event) => {
    state.filter = event.target.value;
    state.page = 0;
    draw();
  });
  document.getElementById("groups-least").addEventListener("input", (event) => {
    state.least = Number(event.target.value) || 0;
    state.page = 0;
    draw();
  });
  before.addEventListener("click", () => turn(-1));
  after.addEventListener("click", () => turn(1));
  document.getElementById("groups-controls").hidden = false;
  draw();
}

// A table is a stop of the Tab key only where it has to be scrolled sideways.
function markScrolling() {
  for (const part of document.querySelectorAll(".wide")) {
    if (part.scrollWidth > part.clientWidth) part.tabIndex = 0;
    else part.removeAttribute("tabindex");
  }
}

if (typeof document !== "undefined") {
  start();
  markScrolling();
  window.addEventListener("resize", markScrolling);
}
if (typeof module !== "undefined") module.exports = { arrange, cellText, compareValues, pageOf };
