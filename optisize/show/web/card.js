// The picked designs: place on the front, limits, drawn sizes, operating point; a second design beside the first.

const chosen = () => [["a", choice.a], ["b", choice.b]].filter(([, row]) => row !== null);
const badge = (slot) => make("span", {class: `badge ${slot}`}, slot.toUpperCase());
const both = () => choice.a !== null && choice.b !== null;

// A table with a caption; cells are texts or elements, the first of a row its heading.
function grid(caption, heads, body, dense = false) {
  return make("div", {class: "part"}, make("h3", {}, caption), make("div", {class: "scroll", tabindex: 0, role: "region",
    "aria-label": caption}, make("table", {"aria-label": caption, class: dense ? "dense" : ""},
    make("thead", {}, make("tr", {}, ...heads.map((h) => make("th", {scope: "col"}, h)))),
    make("tbody", {}, ...body.map((cells) => make("tr", {}, ...cells.map((cell, i) =>
      (i === 0 ? make("th", {scope: "row"}, cell) : cell instanceof HTMLTableCellElement ? cell : make("td", {class: "short"}, cell)))))))));
}

const small = (text) => make("small", {}, text);
const tied = (text) => text.replaceAll(" ", "\u00a0"); // a number and its unit stay on one line

const slotHeads = () => chosen().map(([slot, row]) => make("span", {class: "short"}, badge(slot), ` design ${record.designs[row]}`));

// How B differs from A in a column, in words where one of them is better.
function difference(key) {
  const c = columns.get(key);
  const [a, b] = [values[key][choice.a], values[key][choice.b]];
  if (a === b) return make("td", {class: "same"}, "same");
  if (!Number.isFinite(a) || !Number.isFinite(b)) return make("td", {}, "differs");
  const change = b - a;
  const percent = a !== 0 && !["dB", "deg", "V/V", ""].includes(c.unit) ? ` (${signed((100 * change) / Math.abs(a), "%")})` : "";
  const better = gained(c, a, b);
  const word = better > 0 ? "▲ better" : better < 0 ? "▽ worse" : "";
  return make("td", {class: better > 0 ? "better" : better < 0 ? "worse" : ""},
    make("span", {class: "short"}, signed(change, c.unit)), make("span", {class: "short"}, percent), " ",
    make("span", {class: "short"}, word));
}

const withDifference = (cells, key) => (both() ? [...cells, difference(key)] : cells);
const differenceHead = () => (both() ? [make("span", {class: "short"}, "B against A")] : []);

function goalsPart() {
  const body = record.goals.map((key) => {
    const c = columns.get(key);
    const finite = values[key].filter(Number.isFinite);
    const extremes = [Math.min(...finite), Math.max(...finite)];
    const [worst, best] = c.better === "max" ? extremes : extremes.reverse();
    const bar = make("div", {class: "bar", "aria-hidden": "true"}, ...chosen().map(([slot, row]) =>
      make("span", {class: `pin ${slot}`, style: `left:${100 * record.places[key][row]}%`}, slot.toUpperCase())));
    const places = chosen().map(([slot, row]) => `${slot.toUpperCase()} ${figure(100 * record.places[key][row], 3)} %`);
    return withDifference([make("span", {}, heading({...c, shown: ""})), ...chosen().map(([, row]) => told(key, row)),
      make("td", {class: "place"}, make("div", {class: "ends"}, make("span", {class: "short"}, write(worst, c.unit, 3)),
        bar, make("span", {class: "short"}, write(best, c.unit, 3))), small(`${places.join(", ")} of the way to the best`))], key);
  });
  return grid("Goals, and the place between the extremes of the front",
    ["goal", ...slotHeads(), "worst … best", ...differenceHead()], body);
}

function limitsPart() {
  const body = record.limits.flatMap((limit) => room(limit, 0).map(([name], which) => {
    const c = columns.get(limit.key);
    const cells = chosen().flatMap(([, row]) => {
      const [, bound, left] = room(limit, row)[which];
      const share = bound !== 0 && c.unit !== "dB" && c.unit !== "deg"
        ? ` (${figure((100 * left) / Math.abs(bound), 3)}\u00a0%)` : "";
      const word = Number.isNaN(left) ? "undefined" : left >= -1e-9 * Math.abs(bound)
        ? `${tied(write(Math.max(0, left), c.unit, 3))}${share} left` : `missed by ${write(-left, c.unit, 3)}`;
      return [make("td", {class: left < -1e-9 * Math.abs(bound) ? "worse" : ""},
        make("span", {class: "short"}, told(limit.key, row)), small(word))];
    });
    const bound = `${boundText(limit.key, name, limit.bounds[name])}${limit.implied ? " (implied)" : ""}`;
    return [make("span", {}, heading({...c, shown: ""}), small(bound)), ...cells];
  }));
  return grid("Limits, and how much is left", ["limit", ...slotHeads()], body);
}

// How the transistors of a group are drawn, resistors, bias currents: [name, what it is, lines of a row].
const exact = (value, unit) => write(value, unit, 9); // as it stands on the grid
const unitsText = (number) => `${number}\u00a0unit${number > 1 ? "s" : ""}`;

function drawn() {
  const groups = new Map();
  for (const t of record.transistors) groups.set(t.group, [...(groups.get(t.group) || []), t]);
  const found = [...groups.values()].map((members) => {
    const [t] = members;
    const names = members.map((m) => m.name);
    return [t.group, `${t.channel}-channel`, (row) => {
      const units = members.map((m) => m.units[row]);
      const alike = units.every((u) => u === units[0]);
      const number = alike ? `${names.join(", ")}: ${unitsText(units[0])}${names.length > 1 ? " each" : ""}`
        : members.map((m, i) => `${names[i]}: ${unitsText(units[i])}`).join(", ");
      const fingers = `${t.fingers[row]} finger${t.fingers[row] > 1 ? "s" : ""} of`;
      return [`${fingers} ${tied(exact(t.finger_width[row], "m"))} / ${tied(exact(t.length[row], "m"))}`, number];
    }];
  });
  const alike = (r, s) => ["resistance", "length"].every((key) => r[key].every((v, row) => v === s[key][row]));
  const done = new Set();
  for (const r of record.resistors) {
    if (done.has(r.name)) continue;
    const same = record.resistors.filter((s) => alike(r, s));
    same.forEach((s) => done.add(s.name));
    found.push([same.map((s) => s.name).join(", "), same.length > 1 ? "resistors, each" : "resistor", (row) => [
      `${figure(r.squares[row], 9)} squares, ${tied(exact(r.length[row], "m"))} long`,
      `${tied(exact(r.resistance[row], "ohm"))}, ${tied(exact(r.width, "m"))} wide`]]);
  }
  for (const s of record.sources) {
    found.push([s.name, "bias current", (row) => [exact(values[s.key][row], columns.get(s.key).unit), s.key]]);
  }
  return found;
}

function drawnPart() {
  const body = drawn().map(([name, kind, text]) => {
    const texts = chosen().map(([, row]) => text(row));
    const same = both() && texts[0].join() === texts[1].join();
    const other = both() ? [make("td", {class: same ? "same" : "differs"}, same ? "same" : "≠ differs")] : [];
    return [make("span", {}, name, small(kind)), ...texts.map(([line, note]) => make("td", {}, line, small(note))), ...other];
  });
  return grid("Ready to draw: width of a finger / length", ["device", ...slotHeads(), ...differenceHead()], body);
}

function sizesPart() {
  const keys = record.columns.filter((c) => c.kind === "free" || c.kind === "fixed");
  const body = keys.map((c) => withDifference([c.kind === "fixed" ? `${c.key} (fixed)` : c.key,
    ...chosen().map(([, row]) => told(c.key, row, 9))], c.key));
  return grid("Sizes, as in a sizing file", ["size", ...slotHeads(), ...differenceHead()], body);
}

const FIGURES = [["id", "id"], ["vgs", "vgs"], ["vds", "vds"], ["vdsat", "vdsat"], ["margin", "margin"], ["gm", "gm"],
  ["gds", "gds"], ["gm_per_id", "gm/id"], ["inversion", "inversion"]];

function inversionWord(level) {
  return level < 0.1 ? "weak" : level > 10 ? "strong" : "moderate";
}

function pointPart() {
  const units = new Map(record.figures.map((f) => [f.name, f.unit]));
  const body = record.transistors.flatMap((t) => chosen().map(([slot, row]) => [
    both() ? make("span", {}, badge(slot), ` ${t.name}`) : t.name,
    ...FIGURES.map(([name]) => pointCell(t, name, units.get(name), row, slot))]));
  return grid("Operating point; margin is vds \u2212 vdsat",
    ["transistor", ...FIGURES.map(([, text]) => text)], body, true);
}

function pointCell(t, name, unit, row, slot) {
  const v = t.figures[name][row];
  const text = name === "gm_per_id" ? `${figure(v, 3)} /V` : write(typeof v === "string" ? WORDS[v] : v, unit, 3);
  const note = name === "inversion" ? inversionWord(v) : name === "margin" && !t.saturates ? "diode" : "";
  const cell = make("td", {class: "short"}, text);
  if (slot === "b" && both()) {
    const before = t.figures[name][choice.a];
    const change = (v - before) / Math.abs(before || 1);
    if (Math.abs(change) > 0.01) {
      cell.replaceChildren(make("span", {class: "differs"}, `${text}${change > 0 ? " ↑" : " ↓"}`));
    }
  }
  if (note) cell.append(" ", small(note));
  return cell;
}

function measuresPart() {
  const keys = record.columns.filter((c) => ["named", "other", "simulated"].includes(c.kind));
  const body = keys.map((c) => withDifference([heading({...c, shown: ""}), ...chosen().map(([, row]) => told(c.key, row))],
    c.key));
  return make("details", {id: "all-measures", open: measuresOpen, ontoggle: (e) => (measuresOpen = e.target.open)},
    make("summary", {}, "All other measures"),
    grid("Measures", ["measure", ...slotHeads(), ...differenceHead()], body));
}

let measuresOpen = false;

let shownCard = ""; // what is in the page, to leave it alone while sliders move

function refreshCard() {
  refreshHeld();
  if (shownCard === `${choice.a} ${choice.b}`) return;
  shownCard = `${choice.a} ${choice.b}`;
  const parts = chosen().length ? [goalsPart(), limitsPart(), drawnPart(), pointPart(), sizesPart(), measuresPart()]
    : [make("p", {}, "No design is picked: tap one in a plot, or press A in the table.")];
  const note = both() ? make("p", {class: "hint"}, "▲ better and ▽ worse say how B compares with A; at the operating " +
    "point ↑ and ↓ mark what differs by more than 1 %.") : null;
  byId("card").replaceChildren(...[note, ...parts].filter(Boolean));
  for (const slot of ["a", "b"]) byId(`pick-${slot}`).value = choice[slot] === null ? "" : String(choice[slot]);
  byId("swap").disabled = !both();
}

// The picked designs in a line each, beside the sliders.
function refreshHeld() {
  byId("held").replaceChildren(...chosen().map(([slot, row]) => make("p", {class: kept[row] ? "" : "outside"},
    badge(slot), ` design ${record.designs[row]}: `, record.goals.map((key) => told(key, row, 3)).join(", "),
    kept[row] ? "" : " (outside the sliders)", " ", slot === "a" ? make("a", {href: "#card-part"}, "details") : "")));
}
