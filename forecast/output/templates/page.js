for (const table of document.querySelectorAll("table.sortable")) {
  const body = table.tBodies[0];
  table.querySelectorAll("thead th").forEach((head, column) => {
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const up = head.getAttribute("aria-sort") !== "ascending";
      table.querySelectorAll("thead th").forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", up ? "ascending" : "descending");
      const key = (row) => {
        const cell = row.cells[column];
        const text = cell.dataset.key ?? cell.textContent.trim();
        const number = parseFloat(text);
        return /^[-+]?[\d.]/.test(text) && !Number.isNaN(number) && !/^\d{4}-/.test(text) ? number : text;
      };
      const rows = [...body.rows].map((row) => [key(row), row]);
      rows.sort(([a], [b]) => (typeof a === typeof b ? (a < b ? -1 : a > b ? 1 : 0) : typeof a === "number" ? -1 : 1));
      if (!up) rows.reverse();
      body.append(...rows.map(([, row]) => row));
    });
  });
}
