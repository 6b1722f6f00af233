"use strict";
for (const table of document.querySelectorAll("table.sortable")) {
  const heads = [...table.tHead.rows[0].cells];
  heads.forEach((head, column) => {
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const rising = head.getAttribute("aria-sort") !== "ascending";
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", rising ? "ascending" : "descending");
      const body = table.tBodies[0];
      const keyed = [...body.rows].map((row) => {
        const cell = row.cells[column];
        return [cell.dataset.key ?? cell.textContent.trim(), row];
      });
      const numbers = keyed.every(([key]) => key === "" || Number.isFinite(Number(key)));
      keyed.sort(([a], [b]) => {
        if (a === "" || b === "") return (a === "") - (b === "");
        const order = numbers ? Number(a) - Number(b) : a.localeCompare(b);
        return rising ? order : -order;
      });
      body.append(...keyed.map(([, row]) => row));
    });
  });
}
