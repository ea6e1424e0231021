// What the page knows: the record of the run, and the choices of the reader; how elements of the page are made.

const record = JSON.parse(document.getElementById("record").textContent);
const count = record.designs.length;
const columns = new Map(record.columns.map((c) => [c.key, c]));
const WORDS = {"unlimited": Infinity, "-unlimited": -Infinity};
const values = {};
for (const c of record.columns) {
  values[c.key] = record.values[c.key].map((v) => (v === null ? NaN : typeof v === "string" ? WORDS[v] : v));
}
const BETTER = {max: "higher is better", min: "lower is better", zero: "nearer to zero is better", "": ""};
const limitOf = new Map(record.limits.map((limit) => [limit.key, limit]));

// Choices: picked designs as rows, bounds of sliders by column, order of the table.
const choice = {a: record.first, b: null, bounds: new Map(), sort: {key: "design", down: false}, only: false};
const kept = new Array(count).fill(true);
let brushed = new Set();

const byId = (id) => document.getElementById(id);

// An element with attributes and children; text becomes text, never markup. "on…" are listeners.
function make(tag, attributes = {}, ...children) {
  const element = document.createElement(tag);
  for (const [name, value] of Object.entries(attributes)) {
    if (value === false || value === null || value === undefined) continue;
    if (name.startsWith("on")) element.addEventListener(name.slice(2), value);
    else element.setAttribute(name, value === true ? "" : value);
  }
  element.append(...children.filter((c) => c !== null && c !== undefined));
  return element;
}

const told = (key, row, digits = 4) => write(values[key][row], columns.get(key).unit, digits);

// Name, settings and shown unit of a column: "supply current [uA]".
function heading(c) {
  const name = c.kind === "free" || c.kind === "fixed" ? c.name : c.name.replaceAll("_", " ");
  return c.shown ? `${name} [${c.shown}]` : name;
}

const signedValue = (c, v) => (c.better === "zero" ? Math.abs(v) : v);

// How much of something better the second value is than the first: positive where it is, 0 where nothing is wanted.
function gained(c, from, to) {
  const sign = {max: 1, min: -1, zero: -1, "": 0}[c.better];
  const difference = signedValue(c, to) - signedValue(c, from);
  return Number.isNaN(difference) || !sign ? 0 : sign * difference;
}

const boundText = (key, name, bound) => `${name} ${write(bound, columns.get(key).unit)}`;

// What is left to each bound of a limit: [name, bound, distance], positive inside.
function room(limit, row) {
  const v = limit.signed ? Math.abs(values[limit.key][row]) : values[limit.key][row];
  return Object.entries(limit.bounds).map(([name, b]) => [name, b, name === "min" ? v - b : b - v]);
}

function options(select, keys, chosen, extra = []) {
  const groups = {goal: "goals", named: "limits and own measures", other: "other measures", simulated: "simulated",
    free: "free sizes", fixed: "fixed sizes"};
  select.replaceChildren(...extra);
  for (const [kind, name] of Object.entries(groups)) {
    const some = keys.filter((key) => columns.get(key).kind === kind);
    if (!some.length) continue;
    select.append(make("optgroup", {label: name},
      ...some.map((key) => make("option", {value: key, selected: key === chosen}, heading(columns.get(key))))));
  }
}
