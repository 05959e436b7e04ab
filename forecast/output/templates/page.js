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
      const sign = up ? 1 : -1;
      // Numbers before words; what is not known stays at the end either way.
      rows.sort(([a], [b]) => {
        if (a === b) return 0;
        if (a === "" || b === "") return a === "" ? 1 : -1;
        if (typeof a !== typeof b) return sign * (typeof a === "number" ? -1 : 1);
        return sign * (a < b ? -1 : 1);
      });
      body.append(...rows.map(([, row]) => row));
    });
  });
}
