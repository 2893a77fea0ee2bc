"use strict";
// A click on a column's heading sorts its table: up, then down. Rows that a cell spans, or without a number, go last.
const number = text => {
  const found = text.replaceAll(",", "").match(/^([<>]?)\s*([+-]?\d*\.?\d+)/);
  return found ? Number(found[2]) * (found[1] === "<" ? 0.999 : 1) + (found[1] === ">" ? 1e-9 : 0) : null;
};
const sorted = (rows, column, down) => {
  const cells = rows.map(row => row.cells[column]).map(cell => cell && cell.colSpan === 1 ? cell.textContent.trim() : "-");
  const numeric = cells.every(text => text === "-" || number(text) !== null);
  const keys = cells.map(text => text === "-" ? null : numeric ? number(text) : text.toLowerCase());
  const order = rows.map((_, place) => place).sort((a, b) => {
    if (keys[a] === null || keys[b] === null) return (keys[a] === null) - (keys[b] === null) || a - b;
    return (keys[a] < keys[b] ? -1 : keys[a] > keys[b] ? 1 : 0) * (down ? -1 : 1) || a - b;
  });
  return order.map(place => rows[place]);
};
for (const table of document.querySelectorAll("table.sortable")) {
  const headings = [...table.tHead.rows[0].cells], body = table.tBodies[0];
  for (const [column, heading] of headings.entries()) {
    const button = document.createElement("button");
    button.type = "button";
    button.append(...heading.childNodes);
    heading.append(button);
    button.addEventListener("click", () => {
      const down = heading.getAttribute("aria-sort") === "ascending";
      for (const other of headings) other.removeAttribute("aria-sort");
      heading.setAttribute("aria-sort", down ? "descending" : "ascending");
      body.append(...sorted([...body.rows], column, down));
    });
  }
}
