"use strict";
(() => {
  const table = document.querySelector("table:has(thead button)");
  if (!table) return;
  const body = table.tBodies[0];
  const rows = Array.from(body.rows);
  const buttons = Array.from(table.querySelectorAll("thead button"));
  const said = document.getElementById("shown");
  const find = document.getElementById("find");
  const choices = Array.from(document.querySelectorAll("#filters select"));
  const text = new Map(rows.map((row) => [row, row.textContent.toLowerCase()]));

  function value(row, column, numeric) {
    const words = row.cells[column].textContent.trim();
    if (!numeric) return words.toLowerCase();
    const x = parseFloat(words.replace(/[,%<\s]/g, ""));
    return Number.isNaN(x) ? null : x;
  }

  function sort(button) {
    const head = button.closest("th");
    const column = head.cellIndex;
    const numeric = head.classList.contains("n");
    const down = head.getAttribute("aria-sort") === "ascending";
    for (const other of buttons) other.closest("th").removeAttribute("aria-sort");
    head.setAttribute("aria-sort", down ? "descending" : "ascending");
    const keyed = rows.map((row, i) => [value(row, column, numeric), i, row]);
    keyed.sort(([a, i], [b, j]) => {
      // what has no value stays last, whichever way the rest runs
      if (a === null || b === null) return a === b ? i - j : a === null ? 1 : -1;
      const order = numeric ? a - b : a.localeCompare(b);
      return (down ? -order : order) || i - j;
    });
    body.append(...keyed.map((key) => key[2]));
  }

  function filter() {
    const wanted = find.value.toLowerCase().split(/\s+/).filter(Boolean);
    let n = 0;
    for (const row of rows) {
      const shown =
        wanted.every((word) => text.get(row).includes(word)) &&
        choices.every(
          (choice) => !choice.value || row.cells[+choice.dataset.column].textContent.trim() === choice.value.trim()
        );
      row.hidden = !shown;
      n += shown;
    }
    said.textContent = `${n.toLocaleString("en")} of ${rows.length.toLocaleString("en")} shown`;
  }

  for (const button of buttons) button.addEventListener("click", () => sort(button));
  find.addEventListener("input", filter);
  for (const choice of choices) choice.addEventListener("change", filter);
  for (const link of document.querySelectorAll("a[data-rule]")) {
    link.addEventListener("click", () => {
      for (const choice of choices) choice.value = choice.id === "by-rule" ? link.dataset.rule : "";
      find.value = "";
      filter();
    });
  }
  document.getElementById("filters").hidden = false;
  filter();
})();
