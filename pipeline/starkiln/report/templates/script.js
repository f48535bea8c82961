"use strict";
(() => {
  const key = (row, column) => {
    const cell = row.cells[column];
    const number = cell.dataset.value === undefined ? NaN : Number(cell.dataset.value);
    return Number.isNaN(number) ? cell.textContent.trim().toLowerCase() : number;
  };
  const compare = (a, b) => (typeof a === "number" && typeof b === "number" ? a - b : String(a).localeCompare(String(b), "en", { numeric: true }));

  const sort = (table, header) => {
    const column = header.cellIndex;
    // Numbers are looked at from the largest down, words from the first on.
    const first = header.classList.contains("n") ? "descending" : "ascending";
    const other = first === "ascending" ? "descending" : "ascending";
    const order = header.getAttribute("aria-sort") === first ? other : first;
    for (const each of table.tHead.rows[0].cells) each.removeAttribute("aria-sort");
    header.setAttribute("aria-sort", order);
    const body = table.tBodies[0];
    const rows = [...body.rows].sort((a, b) => compare(key(a, column), key(b, column)) * (order === "ascending" ? 1 : -1));
    body.append(...rows);
  };

  const addFilter = (table, place) => {
    const box = document.createElement("p");
    const label = document.createElement("label");
    const input = document.createElement("input");
    const count = document.createElement("output");
    box.className = "filter";
    input.type = "search";
    input.id = `filter-${place}`;
    input.autocomplete = "off";
    label.htmlFor = input.id;
    label.textContent = table.dataset.filter;
    count.setAttribute("for", input.id);
    count.setAttribute("aria-live", "polite");
    const rows = [...table.tBodies[0].rows];
    const update = () => {
      const words = input.value.toLowerCase().split(/\s+/).filter(Boolean);
      let shown = 0;
      for (const row of rows) {
        const text = row.textContent.toLowerCase();
        row.hidden = !words.every((word) => text.includes(word));
        shown += row.hidden ? 0 : 1;
      }
      count.textContent = `${shown} of ${rows.length} rows`;
    };
    input.addEventListener("input", update);
    box.append(label, input, count);
    table.parentElement.before(box);
    update();
  };

  document.querySelectorAll("table[data-sortable]").forEach((table, place) => {
    for (const header of table.tHead.rows[0].cells) {
      const button = document.createElement("button");
      button.type = "button";
      button.textContent = header.textContent;
      button.addEventListener("click", () => sort(table, header));
      header.replaceChildren(button);
    }
    if (table.dataset.filter) addFilter(table, place);
  });

  const open = () => {
    const target = document.getElementById(location.hash.slice(1));
    const details = target && target.closest("details");
    if (details) details.open = true;
    if (target && details) target.scrollIntoView();
  };
  addEventListener("hashchange", open);
  addEventListener("beforeprint", () => document.querySelectorAll("details").forEach((details) => (details.open = true)));
  open();
})();
