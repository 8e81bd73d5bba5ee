"use strict";
// The table of images: sorted by a column, and only the rows that hold a text.
(() => {
  const table = document.querySelector("table.sortable");
  if (!table) return;
  const body = table.tBodies[0], rows = [...body.rows], filter = document.getElementById("filter");
  document.querySelectorAll(".scripted").forEach((one) => { one.hidden = false; });
  const texts = rows.map((row) => row.textContent.toLowerCase());
  function narrow() {
    const wanted = filter.value.trim().toLowerCase();
    rows.forEach((row, k) => { row.hidden = wanted !== "" && !texts[k].includes(wanted); });
    document.getElementById("count").textContent = `${rows.filter((row) => !row.hidden).length} of ${rows.length} images`;
  }
  function sort(column, head) {
    const down = head.getAttribute("aria-sort") === "ascending";
    table.querySelectorAll("th").forEach((one) => one.setAttribute("aria-sort", "none"));
    head.setAttribute("aria-sort", down ? "descending" : "ascending");
    const isNumber = head.classList.contains("number");
    const key = (row) => {
      const cell = row.cells[column], said = cell.dataset.value ?? cell.textContent;
      return isNumber ? (said === "" ? NaN : Number(said)) : said.toLowerCase();
    };
    const keyed = rows.map((row, k) => [key(row), k, row]);
    const missing = (value) => value === "" || Number.isNaN(value);
    keyed.sort((a, b) => {
      if (missing(a[0]) || missing(b[0])) return missing(a[0]) - missing(b[0]) || a[1] - b[1];
      return a[0] === b[0] ? a[1] - b[1] : (a[0] < b[0] ? -1 : 1) * (down ? -1 : 1);
    });
    body.append(...keyed.map((one) => one[2]));
  }
  [...table.tHead.rows[0].cells].forEach((head, column) => {
    if (head.textContent === "picture") return;
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => sort(column, head));
  });
  filter.addEventListener("input", narrow);
  narrow();
})();
