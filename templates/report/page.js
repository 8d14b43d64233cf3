// tables sort by the column whose heading is pressed; without this script they stay in their own order
for (const table of document.querySelectorAll("table.sortable")) {
  const body = table.tBodies[0];
  const heads = [...table.tHead.rows[0].cells];
  heads.forEach((head, column) => {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = head.textContent;
    head.replaceChildren(button);
    button.addEventListener("click", () => {
      const up = head.getAttribute("aria-sort") !== "ascending";
      const key = (row) => {
        const cell = row.cells[column];
        return "key" in cell.dataset ? Number(cell.dataset.key) : cell.textContent.trim();
      };
      const order = (a, b) => {
        const [x, y] = [key(a), key(b)];
        if (typeof x === "number" && typeof y === "number") return x - y;
        if (typeof x === "number") return -1;
        if (typeof y === "number") return 1;
        return x.localeCompare(y, "en", { numeric: true });
      };
      const rows = [...body.rows].sort(order);
      body.replaceChildren(...(up ? rows : rows.reverse()));
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", up ? "ascending" : "descending");
    });
  });
}
