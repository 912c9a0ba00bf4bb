"use strict";
/* Tables that sort by a column's head; numbers as numbers, what is missing last. */
function sortable(table) {
  const body = table.tBodies[0];
  const heads = [...table.tHead.rows[table.tHead.rows.length - 1].cells];
  heads.forEach((head, column) => {
    const button = head.querySelector("button");
    if (!button) return;
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "descending" ? false
        : head.getAttribute("aria-sort") === "ascending" ? true : head.dataset.first !== "up";
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const value = (row) => {
        const cell = row.cells[column];
        const text = cell.dataset.value !== undefined ? cell.dataset.value : cell.textContent.trim();
        return text === "" ? null : head.dataset.kind === "text" ? text : Number(text);
      };
      const rows = [...body.rows].map((row) => [value(row), row]);
      rows.sort(([a], [b]) => {
        if (a === null || b === null) return (a === null) - (b === null);
        const order = typeof a === "string" ? a.localeCompare(b) : a - b;
        return down ? -order : order;
      });
      body.append(...rows.map(([, row]) => row));
      table.dispatchEvent(new CustomEvent("arranged"));
    });
  });
}

document.querySelectorAll("table[data-sortable]").forEach(sortable);
