for (const table of document.querySelectorAll("table.sorts")) {
  const heads = Array.from(table.tHead.rows[0].cells);
  const key = (row, column) => {
    const cell = row.cells[column];
    const text = cell.dataset.key ?? cell.textContent.trim();
    const number = Number(text);
    return text !== "" && Number.isFinite(number) ? number : text;
  };
  heads.forEach((head, column) => {
    head.querySelector("button").addEventListener("click", () => {
      const up = head.getAttribute("aria-sort") !== "ascending";
      heads.forEach((other) => other.setAttribute("aria-sort", "none"));
      head.setAttribute("aria-sort", up ? "ascending" : "descending");
      const body = table.tBodies[0];
      const rows = Array.from(body.rows).map((row) => [key(row, column), row]);
      rows.sort(([a], [b]) => {
        const order = typeof a === typeof b ? (a < b ? -1 : a > b ? 1 : 0) : typeof a === "number" ? -1 : 1;
        return up ? order : -order;
      });
      rows.forEach(([, row]) => body.append(row));
    });
  });
}
