// The page around the viewer: sortable tables, and foldable parts open in print.

for (const table of document.querySelectorAll("table.sortable")) {
  const heads = [...table.tHead.rows[0].cells];
  const body = table.tBodies[0];
  heads.forEach((head, column) => {
    if (head.tagName !== "TH") return;
    const button = document.createElement("button");
    button.type = "button";
    button.className = "sort";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      heads.forEach((h) => h.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const value = (row) => {
        const text = row.cells[column].dataset.value ?? row.cells[column].textContent.trim();
        return text !== "" && Number.isFinite(Number(text)) ? Number(text) : text;
      };
      const compare = (a, b) => {
        const [x, y] = [value(a), value(b)];
        // Cells without a number stay last either way.
        if (typeof x !== typeof y) return typeof x === "number" ? -1 : 1;
        const order = typeof x === "number" ? x - y : x.localeCompare(y);
        return down ? -order : order;
      };
      body.append(...[...body.rows].sort(compare));
    });
  });
}

let opened = [];
window.addEventListener("beforeprint", () => {
  opened = [...document.querySelectorAll("details:not([open])")];
  opened.forEach((d) => { d.open = true; });
});
window.addEventListener("afterprint", () => {
  opened.forEach((d) => { d.open = false; });
});
