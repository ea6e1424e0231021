// Everything put together: one refresh after each choice of the reader.

let waiting = false;
function refresh() {
  narrow();
  if (waiting) return;
  waiting = true;
  requestAnimationFrame(() => {
    waiting = false;
    sayCount();
    refreshViews();
    refreshTable();
    refreshCard();
    refreshDeck();
  });
}

function pick(slot, row) {
  choice[slot] = row;
  refresh();
}

function brush(some) {
  const [only] = some;
  brushed = some;
  if (some.size === 1) choice.a = only;
  refresh();
}

function unbrush() {
  if (source) source.selected.indices = [];
  brush(new Set());
}

function setTheme(theme) {
  document.documentElement.dataset.theme = theme;
  byId("theme").textContent = theme === "dark" ? "Light" : "Dark";
  paint(theme);
}

function startTheme() {
  const wish = window.matchMedia("(prefers-color-scheme: dark)");
  let own = false; // the reader's own choice stays
  byId("theme").addEventListener("click", () => {
    own = true;
    setTheme(document.documentElement.dataset.theme === "dark" ? "light" : "dark");
  });
  wish.addEventListener("change", () => own || setTheme(wish.matches ? "dark" : "light"));
  setTheme(wish.matches ? "dark" : "light");
}

function startTexts() {
  byId("caution").textContent = record.caution;
  byId("summary").textContent = `${count} designs, each meets every limit; ` + record.facts
    .filter(([name]) => name === "stage" || name === "conditions").map(([, text]) => text).join("; ");
  byId("facts").append(...record.facts.flatMap(([name, text]) => [make("dt", {}, name), make("dd", {}, text)]));
  const measures = record.columns.filter((c) => c.text && c.kind !== "simulated");
  byId("words").append(...measures.flatMap((c) => [make("dt", {}, heading(c)),
    make("dd", {}, [c.text, BETTER[c.better] && `Usually ${BETTER[c.better]}.`, c.source && `Source: ${c.source}.`]
      .filter(Boolean).join(" "))]),
  ...record.figures.filter((f) => f.text).flatMap((f) => [make("dt", {}, `${f.name} of a transistor`), make("dd", {}, f.text)]));
}

function startChoices() {
  for (const slot of ["a", "b"]) {
    byId(`pick-${slot}`).append(make("option", {value: ""}, slot === "a" ? "none" : "none to compare"),
      ...record.designs.map((number, row) => make("option", {value: row}, `design ${number}`)));
    byId(`pick-${slot}`).addEventListener("change", (e) => pick(slot, e.target.value === "" ? null : Number(e.target.value)));
  }
  byId("swap").addEventListener("click", () => {
    [choice.a, choice.b] = [choice.b, choice.a];
    refresh();
  });
  byId("unbrush").addEventListener("click", unbrush);
  document.addEventListener("keydown", (e) => e.key === "Escape" && unbrush());
}

function startSelects() {
  const keys = record.columns.map((c) => c.key);
  const any = view("any");
  options(byId("any-x"), keys, any.tags[0]);
  options(byId("any-y"), keys, any.tags[1]);
  for (const id of ["any-x", "any-y"]) {
    byId(id).addEventListener("change", () => show(view("any"), byId("any-x").value, byId("any-y").value));
  }
  options(byId("sizes-y"), keys.filter((key) => ["goal", "named", "other"].includes(columns.get(key).kind)), record.goals[0]);
  byId("sizes-y").addEventListener("change", () => {
    for (const plot of plots.roots()) if (plot.name.startsWith("size-")) show(plot, plot.tags[0], byId("sizes-y").value);
  });
  options(byId("colour"), keys, record.goals.at(-1));
  byId("colour").addEventListener("change", () => shade(byId("colour").value));
  shade(record.goals.at(-1));
}

const showAll = () => plots.roots().forEach((plot) => show(plot, ...plot.tags));

async function start() {
  if (window.innerWidth < 960) byId("narrow-part").open = false; // so that the plots are not far below
  startTexts();
  startChoices();
  startTable();
  startSliders();
  order();
  if (record.goals.length < 2) byId("goals-heading").closest("section").querySelector("#goals-hint").textContent =
    "The problem has one goal, so nothing is traded against it.";
  const unpacked = startDecks();
  await startViews(brush);
  startSelects();
  showAll();
  startTheme();
  let width = window.innerWidth;
  window.addEventListener("resize", () => {
    if (width !== window.innerWidth) showAll();
    width = window.innerWidth;
  });
  refresh();
  await unpacked;
  document.documentElement.dataset.ready = "yes";
}

window.optisizePage = {ticks, tickText, write, read, columns};
start();
