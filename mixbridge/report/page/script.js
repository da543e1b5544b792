"use strict";
// Sorting, downloads and the contents list. The page is complete without this.
(() => {
  const words = new Intl.Collator("en", { numeric: true, sensitivity: "base" });
  const said = document.getElementById("said");

  const whole = (cell) => cell.dataset.value ?? cell.dataset.text ?? cell.textContent;
  const figure = (cell) => (cell.dataset.value === undefined ? NaN : Number(cell.dataset.value.replace("inf", "Infinity")));

  // Numbers before words, undefined numbers and empty cells last in both directions.
  function compare(a, b, down) {
    const x = figure(a), y = figure(b), s = whole(a), t = whole(b);
    const rank = (cell, number, text) => (!Number.isNaN(number) ? 0 : cell.dataset.value === undefined && text !== "" && text !== "-" ? 1 : 2);
    const p = rank(a, x, s), q = rank(b, y, t);
    if (p !== q) return p - q;
    const order = p === 0 ? (x < y ? -1 : x > y ? 1 : 0) : p === 1 ? words.compare(s, t) : 0;
    return down ? -order : order;
  }

  function sortable(table) {
    const body = table.tBodies[0], rows = [...body.rows], heads = [...table.tHead.rows[0].cells];
    if (rows.length < 2) return;
    heads.forEach((head, column) => {
      if (head.tagName !== "TH") return;
      const button = document.createElement("button");
      button.type = "button";
      button.append(...head.childNodes);
      head.append(button);
      button.addEventListener("click", () => {
        const next = { ascending: "descending", descending: "" }[head.getAttribute("aria-sort")] ?? "ascending";
        heads.forEach((other) => other.removeAttribute("aria-sort"));
        const sorted = [...rows];
        if (next) {
          head.setAttribute("aria-sort", next);
          sorted.sort((a, b) => compare(a.cells[column], b.cells[column], next === "descending"));
        }
        body.append(...sorted);
        said.textContent = next ? `Sorted by ${button.textContent}, ${next}.` : "In the order of the document.";
      });
    });
  }

  // A spreadsheet runs a text that begins like a formula; an apostrophe keeps it a text.
  function field(text, number) {
    const plain = number || text === "-" || /^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$/.test(text);
    const safe = !plain && /^[=+\-@\t\r\n\uFF1D\uFF0B\uFF0D\uFF20]/.test(text) ? `'${text}` : text;
    return /[",\r\n]/.test(safe) ? `"${safe.replaceAll('"', '""')}"` : safe;
  }

  function csv(table) {
    return [...table.rows]
      .map((row) => [...row.cells].map((cell) => field(whole(cell), cell.dataset.value !== undefined)).join(","))
      .join("\r\n") + "\r\n";
  }

  function save(name, type, text) {
    const link = document.createElement("a");
    link.href = URL.createObjectURL(new Blob([text], { type }));
    link.download = name;
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 10000);
  }

  function downloadable(table) {
    const name = `${table.dataset.name}.csv`, button = document.createElement("button");
    button.type = "button";
    button.className = "download";
    button.textContent = "Download CSV";
    button.setAttribute("aria-describedby", table.caption.id);
    button.addEventListener("click", () => {
      save(name, "text/csv;charset=utf-8", csv(table));
      said.textContent = `Saved ${name}.`;
    });
    table.closest("figure").append(button);
  }

  document.querySelectorAll("main table").forEach((table) => {
    sortable(table);
    downloadable(table);
  });

  // Only what scrolls is a stop of the keyboard.
  const boxes = document.querySelectorAll(".scroll");
  const stops = () => boxes.forEach((box) => (box.scrollWidth > box.clientWidth ? box.setAttribute("tabindex", "0") : box.removeAttribute("tabindex")));
  new ResizeObserver(stops).observe(document.documentElement);

  const contents = document.querySelector("nav details");
  if (contents && window.matchMedia("(max-width: 77.99rem)").matches) contents.open = false;
})();
