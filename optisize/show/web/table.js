// The table of designs: sorted by a heading, narrowed by the sliders, with two buttons a row.

let rows = []; // the rows of the table by design
let active = 0; // the row whose buttons the tabulator key reaches

const listed = () => record.columns.filter((c) => ["goal", "free", "named"].includes(c.kind))
  .sort((a, b) => ["goal", "free", "named"].indexOf(a.kind) - ["goal", "free", "named"].indexOf(b.kind));

const inColumn = (c, row) => {
  const v = values[c.key][row];
  return Number.isFinite(v) ? figure(v / c.factor) : write(v, c.unit);
};

function startTable() {
  const head = make("tr", {}, headingCell("design", "design", ""));
  for (const c of listed()) head.append(headingCell(c.key, heading(c), BETTER[c.better] || "a free size"));
  rows = record.designs.map((number, row) => make("tr", {"data-row": row},
    make("th", {scope: "row"}, make("span", {class: "number"}, String(number)),
      button("a", row, `Pick design ${number} as A`), button("b", row, `Compare with design ${number} as B`)),
    ...listed().map((c) => make("td", {}, inColumn(c, row)))));
  byId("designs").append(make("caption", {id: "table-caption", role: "status"}), make("thead", {}, head),
    make("tbody", {}, ...rows));
  byId("designs").tBodies[0].addEventListener("keydown", moveInTable);
  byId("only").addEventListener("change", (event) => {
    choice.only = event.target.checked;
    refresh();
  });
}

function headingCell(key, text, note) {
  const mark = make("span", {class: "order", "aria-hidden": "true"});
  return make("th", {scope: "col", "data-key": key, "aria-sort": "none"},
    make("button", {type: "button", title: note, onclick: () => sortBy(key)}, text, mark));
}

function button(slot, row, name) {
  return make("button", {type: "button", class: `mark ${slot}`, "data-slot": slot, "aria-label": name, tabindex: -1,
    "aria-pressed": "false", onclick: () => {
      active = row;
      pick(slot, choice[slot] === row && slot === "b" ? null : row);
    }}, slot.toUpperCase());
}

function sortBy(key) {
  const goodFirst = key !== "design" && columns.get(key).better === "max";
  choice.sort = choice.sort.key === key ? {key, down: !choice.sort.down} : {key, down: goodFirst};
  order();
  active = -1; // the keyboard begins at the first row again
  refreshTable();
}

// Put the rows in the order that is asked for; what has no figure comes last.
function order() {
  const {key, down} = choice.sort;
  const of = key === "design" ? record.designs : values[key];
  const by = (i, j) => {
    const [a, b] = [of[i], of[j]];
    if (Number.isNaN(a) || Number.isNaN(b)) return Number.isNaN(a) - Number.isNaN(b);
    return a === b ? i - j : (a < b ? -1 : 1) * (down ? -1 : 1);
  };
  byId("designs").tBodies[0].append(...record.designs.map((_, i) => i).sort(by).map((i) => rows[i]));
  for (const cell of byId("designs").querySelectorAll("thead th")) {
    const own = cell.dataset.key === key;
    cell.setAttribute("aria-sort", own ? (down ? "descending" : "ascending") : "none");
    cell.querySelector(".order").textContent = own ? (down ? " ▼" : " ▲") : "";
  }
}

const visibleRows = () => [...byId("designs").tBodies[0].rows].filter((r) => !r.hidden);

function refreshTable() {
  rows.forEach((tr, row) => {
    tr.hidden = !kept[row] || (choice.only && brushed.size > 0 && !brushed.has(row));
    tr.classList.toggle("brushed", brushed.has(row));
    tr.classList.toggle("is-a", choice.a === row);
    tr.classList.toggle("is-b", choice.b === row);
    for (const slot of ["a", "b"]) tr.querySelector(`.mark.${slot}`).setAttribute("aria-pressed", choice[slot] === row);
  });
  const shown = visibleRows();
  const {key, down} = choice.sort;
  const by = key === "design" ? "number" : heading(columns.get(key));
  byId("table-caption").textContent = `${shown.length} of ${count} designs, by ${by}, ` +
    `${down ? "highest" : "lowest"} first${brushed.size ? "; ● is selected" : ""}`;
  if (!shown.includes(rows[active])) active = shown.length ? Number(shown[0].dataset.row) : 0;
  rows.forEach((tr, row) => tr.querySelectorAll("button").forEach((b) => (b.tabIndex = row === active ? 0 : -1)));
}

function moveInTable(event) {
  const steps = {ArrowDown: 1, ArrowUp: -1, PageDown: 10, PageUp: -10, Home: -Infinity, End: Infinity};
  const from = event.target.closest("tr");
  if (!(event.key in steps) || !from || !event.target.dataset.slot) return;
  event.preventDefault();
  const shown = visibleRows();
  const to = shown[Math.min(shown.length - 1, Math.max(0, shown.indexOf(from) + steps[event.key]))];
  from.querySelectorAll("button").forEach((b) => (b.tabIndex = -1));
  to.querySelectorAll("button").forEach((b) => (b.tabIndex = 0));
  active = Number(to.dataset.row);
  to.querySelector(`.mark.${event.target.dataset.slot}`).focus();
}
