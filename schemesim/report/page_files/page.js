"use strict";
(() => {
  const one = (id) => document.getElementById(id);

  // On a narrow screen rows become cards: every cell carries its heading, and roles that survive the new display.
  const label = (table) => {
    const roles = [[table, "table"], ...[...table.querySelectorAll("thead, tbody")].map((e) => [e, "rowgroup"]),
      ...[...table.rows].map((e) => [e, "row"]), ...[...table.querySelectorAll("td")].map((e) => [e, "cell"]),
      ...[...table.querySelectorAll("th")].map((e) => [e, e.scope === "row" ? "rowheader" : "columnheader"])];
    for (const [element, role] of roles) element.setAttribute("role", role);
    const names = [...table.tHead.rows[0].cells].map((cell) => cell.textContent.trim());
    for (const row of table.tBodies[0].rows) {
      for (const cell of row.cells) {
        const text = document.createElement("span");
        text.append(...cell.childNodes);
        const name = document.createElement("span");
        name.className = "l";
        name.setAttribute("aria-hidden", "true");
        name.textContent = names[cell.cellIndex];
        cell.append(name, text);
      }
    }
  };
  for (const table of document.querySelectorAll("table")) label(table);

  // Sorting: by the value of a cell, numbers before words; what is alike keeps its order.
  const key = (row, column) => {
    const text = row.cells[column].dataset.v;
    const number = text === "" ? NaN : Number(text);
    return Number.isNaN(number) ? text : number;
  };
  const compare = (a, b) => {
    if (typeof a === typeof b) return a < b ? -1 : a > b ? 1 : 0;
    return typeof a === "number" ? -1 : 1;
  };
  const sort = (table, column, down) => {
    const rows = [...table.tBodies[0].rows];
    const keyed = rows.map((row) => [key(row, column), row]);
    keyed.sort((a, b) => (down ? compare(b[0], a[0]) : compare(a[0], b[0])));
    table.tBodies[0].append(...keyed.map((pair) => pair[1]));
    for (const cell of table.tHead.rows[0].cells) {
      cell.setAttribute("aria-sort", cell.cellIndex === column ? (down ? "descending" : "ascending") : "none");
    }
  };
  for (const table of document.querySelectorAll("table.sortable")) {
    table.tHead.addEventListener("click", (event) => {
      const button = event.target.closest("button.sort");
      if (!button) return;
      const heading = button.closest("th");
      sort(table, heading.cellIndex, heading.getAttribute("aria-sort") === "ascending");
    });
  }

  // The table of locations: filters, and an order to choose where no heading is shown.
  const places = one("locations-table");
  const order = one("order");
  const headings = [...places.tHead.rows[0].cells];
  order.add(new Option("as studied", ""));
  headings.forEach((cell, column) => {
    if (!cell.querySelector("button")) return;
    const name = cell.textContent.trim();
    order.add(new Option(`${name}, rising`, `${column} up`));
    order.add(new Option(`${name}, falling`, `${column} down`));
  });
  const studied = [...places.tBodies[0].rows];
  order.addEventListener("change", () => {
    if (order.value) {
      const [column, way] = order.value.split(" ");
      sort(places, Number(column), way === "down");
    } else {
      places.tBodies[0].append(...studied);
      for (const cell of places.tHead.rows[0].cells) cell.setAttribute("aria-sort", "none");
    }
  });
  const texts = new Map(studied.map((row) => [row, [...row.cells].map((c) => c.lastElementChild.textContent).join(" ").toLowerCase()]));
  const filter = () => {
    const words = one("filter").value.toLowerCase().split(/\s+/).filter(Boolean);
    const grade = one("grade").value;
    let shown = 0;
    for (const [row, text] of texts) {
      const fits = words.every((word) => text.includes(word)) && (!grade || row.dataset.tags.split(" ").includes(grade));
      row.hidden = !fits;
      shown += fits ? 1 : 0;
    }
    one("count").textContent = `${shown} of ${texts.size} locations`;
  };
  one("filter").addEventListener("input", filter);
  one("grade").addEventListener("change", filter);
  one("filter").form.addEventListener("submit", (event) => event.preventDefault());

  // On paper nothing is folded away.
  let folded = [];
  addEventListener("beforeprint", () => {
    folded = [...document.querySelectorAll("details:not([open])")];
    for (const part of folded) part.open = true;
  });
  addEventListener("afterprint", () => {
    for (const part of folded) part.open = false;
  });

  // Clearing sequences: made from their templates when opened, one at a time.
  const panel = one("case");
  let opener = null;
  const mark = (number) => {
    for (const button of document.querySelectorAll("button[data-case]")) {
      button.setAttribute("aria-expanded", String(button.dataset.case === number));
    }
  };
  const open = (number) => {
    const template = one(`case-${number}`);
    one("case-title").textContent = template.dataset.title;
    one("case-body").replaceChildren(template.content.cloneNode(true));
    label(one("case-body").querySelector("table"));
    panel.hidden = false;
    mark(number);
    one("case-title").focus({ preventScroll: true });
    panel.scrollIntoView();
  };
  const close = () => {
    if (panel.hidden) return;
    panel.hidden = true;
    one("case-body").replaceChildren();
    mark("");
    if (opener) opener.focus();
  };
  mark("");
  document.addEventListener("click", (event) => {
    const button = event.target.closest("button[data-case]");
    if (!button) return;
    opener = button;
    open(button.dataset.case);
  });
  one("case-close").addEventListener("click", close);
  document.addEventListener("keydown", (event) => {
    if (event.key === "Escape") close();
  });
})();
