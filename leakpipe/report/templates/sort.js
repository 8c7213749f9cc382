for (const table of document.querySelectorAll("table.sortable")) {
  const heads = [...table.tHead.rows[0].cells];
  heads.forEach((head, column) => {
    if (!("sort" in head.dataset)) return;
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const up = head.getAttribute("aria-sort") === "descending";
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", up ? "ascending" : "descending");
      const key = (row) => row.cells[column].dataset.value ?? "";
      const rows = [...table.tBodies[0].rows];
      rows.sort((a, b) => {
        const [x, y] = [key(a), key(b)];
        if (x === "" || y === "") return (x === "") - (y === "");
        const order = isNaN(x) || isNaN(y) ? x.localeCompare(y, "en", { numeric: true }) : x - y;
        return up ? order : -order;
      });
      table.tBodies[0].append(...rows);
    });
  });
}
