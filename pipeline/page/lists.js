/** Tables that sort by a click on a heading and filter by words typed above them. */
function sortable(table) {
  const body = table.tBodies[0], heads = [...table.tHead.rows[0].cells];
  const value = (row, k) => {
    const text = row.cells[k].textContent.trim();
    return heads[k].classList.contains("number") ? (text === "-" ? -Infinity : Number(text)) : text;
  };
  heads.forEach((head, k) => {
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    head.setAttribute("aria-sort", "none");
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      for (const other of heads) other.setAttribute("aria-sort", "none");
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const sign = down ? -1 : 1;
      const rows = [...body.rows].map((row) => [value(row, k), row]);
      rows.sort(([a], [b]) => sign * (typeof a === "number" ? (a < b ? -1 : a > b ? 1 : 0) : a.localeCompare(b)));
      body.append(...rows.map(([, row]) => row));
    });
  });
}

function filterable(table) {
  const label = document.createElement("label"), field = document.createElement("input"), many = document.createElement("span");
  field.type = "search";
  field.placeholder = "words to look for";
  field.setAttribute("aria-label", `Filter: ${table.caption.textContent}`);
  many.setAttribute("role", "status");
  label.className = "filter";
  label.append("Filter ", field);
  const bar = document.createElement("div");
  bar.className = "row";
  bar.append(label, many);
  table.parentElement.before(bar);
  const tell = () => {
    const words = field.value.toLowerCase().split(/\s+/).filter(Boolean);
    let shown = 0;
    for (const row of table.tBodies[0].rows) {
      const text = row.textContent.toLowerCase();
      row.hidden = !words.every((word) => text.includes(word));
      shown += !row.hidden;
    }
    many.textContent = words.length ? `${shown} of ${table.tBodies[0].rows.length}` : "";
  };
  field.addEventListener("input", tell);
}

for (const table of document.querySelectorAll("table.listing")) {
  sortable(table);
  filterable(table);
}
