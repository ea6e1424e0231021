// The plots: which measures they show, their ranges, ticks, labels and colours, and what is brushed in them.

const INKS = {
  light: {paper: "#fffdf9", ink: "#1f2430", soft: "#5b6270", grid: "#e2ddd2", dot: "#8c8a84", edge: "#1f2430",
    a: "#a8400a", b: "#2346b0", bound: "#8a1c6b", low: 0, high: 56},
  dark: {paper: "#171b22", ink: "#ece9e1", soft: "#b3b8c2", grid: "#30363f", dot: "#7d828b", edge: "#c9c6bd",
    a: "#ffb066", b: "#8fb6ff", bound: "#f09ad6", low: 14, high: 64},
};
const axes = {}; // by "view.x": column, and the range that shows all of it
let plots = null; // the document of the plots
let palette = null;
let source = null;

const place = (c, v) => (c.log ? Math.log10(v) : v);
const value = (c, p) => (c.log ? 10 ** p : p);

// Where all designs stand on an axis, with a margin: [low, high] as places.
function span(c) {
  const finite = values[c.key].filter(Number.isFinite).map((v) => place(c, v)).filter(Number.isFinite);
  if (!finite.length) return [0, 1];
  const [low, high] = [Math.min(...finite), Math.max(...finite)];
  const margin = high > low ? 0.07 * (high - low) : Math.abs(high) * 0.05 || 1;
  return [low - margin, high + margin];
}

// Steps of 1, 2 or 5 times a power of ten between two values; decades with 1, 2, 5 where a logarithmic axis is long.
function niceTicks(c, start, end, most) {
  const [low, high] = [value(c, Math.min(start, end)), value(c, Math.max(start, end))];
  if (c.log && high / low > 8) {
    for (const parts of [[1, 2, 5], [1, 3], [1]]) {
      const found = decades(low, high, parts);
      if (found.length <= most) return found;
    }
    const found = decades(low, high, [1]);
    return found.filter((_, i) => i % Math.ceil(found.length / most) === 0);
  }
  const scale = c.factor || 1;
  const raw = (high - low) / scale / most;
  const power = 10 ** Math.floor(Math.log10(raw));
  const whole = c.unit === "" && ["free", "fixed"].includes(c.kind) ? 1 : 0; // units are whole
  const step = Math.max(whole, [1, 2, 5, 10].map((s) => s * power).find((s) => s >= raw));
  const first = Math.ceil(low / scale / step - 1e-9);
  const found = [];
  for (let i = first; i * step * scale <= high * (1 + 1e-12) + step * scale * 1e-9 && found.length < 50; i++) {
    found.push(i * step * scale);
  }
  return found;
}

function decades(low, high, parts) {
  const found = [];
  for (let e = Math.floor(Math.log10(low)); e <= Math.log10(high); e++) {
    for (const part of parts) {
      const v = part * 10 ** e;
      if (v >= low * (1 - 1e-9) && v <= high * (1 + 1e-9)) found.push(v);
    }
  }
  return found;
}

function ticks(axis, start, end) {
  if (!(axis in axes) || !Number.isFinite(start) || !Number.isFinite(end) || start === end) return [];
  const {c, most} = axes[axis];
  return niceTicks(c, start, end, most()).map((v) => place(c, v));
}

// Ticks of a wide axis have prefixes of their own; otherwise they are in the unit of the label.
const wide = (c) => {
  if (c.unit in PREFERRED || UNPREFIXED.includes(c.unit)) return false;
  const finite = values[c.key].filter(Number.isFinite).map(Math.abs).filter((v) => v > 0);
  return finite.length > 0 && Math.max(...finite) / Math.min(...finite) >= 1000;
};

function tickText(axis, tick) {
  if (!(axis in axes)) return "";
  const {c, prefixed} = axes[axis];
  const v = value(c, tick);
  return prefixed ? scaled(v, 3).join("") : figure(Math.abs(v) < 1e-15 * c.factor ? 0 : v / c.factor, 5);
}

// Name, unit and the way that is better, with an arrow along the axis, in lines that are no longer than the axis.
function axisLabel(c, prefixed, room, missing) {
  const unit = prefixed ? written(c.unit) : c.shown;
  const name = heading({...c, shown: unit});
  const way = {max: `${BETTER.max} →`, min: `← ${BETTER.min}`, zero: BETTER.zero, "": "size"}[c.better];
  const whole = `${name}, ${way}`;
  const lines = whole.length <= room ? [whole] : [...wrapped(`${name},`, room), way];
  if (missing) lines.push(`(${missing} without a figure)`);
  return lines.join("\n");
}

function wrapped(text, room) {
  const lines = [];
  for (const word of text.split(" ")) {
    const last = lines.length - 1;
    if (last >= 0 && `${lines[last]} ${word}`.length <= room) lines[last] += ` ${word}`;
    else lines.push(word);
  }
  return lines;
}

// Let a view show two columns.
function show(plot, xKey, yKey) {
  const narrow = window.innerWidth < 700;
  const letters = Math.max(20, Math.floor((byId(`view-${plot.name}`).clientWidth - 75) / 6.8));
  for (const renderer of plot.renderers) {
    if (!renderer.glyph || !renderer.glyph.x) continue;
    for (const glyph of [renderer.glyph, renderer.selection_glyph, renderer.nonselection_glyph]) {
      if (glyph && glyph.x) Object.assign(glyph, {x: {field: xKey}, y: {field: yKey}});
    }
  }
  const parts = [["x", xKey, plot.x_range, plot.below[0], letters, narrow ? 4 : 6],
    ["y", yKey, plot.y_range, plot.left[0], Math.floor((plot.height - 60) / 6.8), 6]];
  for (const [letter, key, range, axis, length, most] of parts) {
    const c = columns.get(key);
    const [start, end] = span(c);
    const prefixed = wide(c);
    const small = plot.name.startsWith("size-") && letter === "x";
    axes[`${plot.name}.${letter}`] = {c, prefixed, most: () => (small ? 4 : most)};
    range.setv({start, end, reset_start: start, reset_end: end});
    const missing = values[key].filter((v) => !Number.isFinite(v) || (c.log && v <= 0)).length;
    axis.axis_label = axisLabel(c, prefixed, length, missing);
    showBounds(plot, letter, c, start, end);
  }
  plot.tags = [xKey, yKey];
  const say = (key) => heading(columns.get(key));
  const head = byId(`head-${plot.name}`);
  if (head) head.textContent = [yKey, xKey].map((key) => columns.get(key).name.replaceAll("_", " ")).join(" against ");
  byId(`view-${plot.name}`).setAttribute("aria-label", `Plot of ${say(yKey)} against ${say(xKey)}; the sliders and ` +
    "the table reach the same designs from the keyboard");
}

// Draw the limits on a measure where they are near enough to the designs.
function showBounds(plot, letter, c, start, end) {
  const limit = limitOf.get(c.key);
  for (const name of ["min", "max"]) {
    const line = plot.center.find((r) => r.name === `${letter}.${name}`);
    const bound = limit ? limit.bounds[name] : undefined;
    const at = bound === undefined ? NaN : place(c, bound);
    line.visible = at >= start && at <= end;
    if (line.visible) line.location = at;
  }
}

function draw() {
  source.data["#told"] = record.designs.map((n, row) => [`design ${n}`, ...record.goals.map((key) =>
    `${columns.get(key).name.replaceAll("_", " ")} ${told(key, row)}`)].join("\n"));
  source.change.emit();
}

// Colour the designs by a column: 0 is the dark end.
function shade(key) {
  const c = columns.get(key);
  const [low, high] = span(c);
  source.data["#shade"] = key ? values[key].map((v) => {
    const p = (place(c, v) - low) / (high - low);
    return Number.isFinite(p) ? Math.min(1, Math.max(0, p)) : NaN;
  }) : new Array(count).fill(0.5);
  source.change.emit();
  const finite = values[key].filter(Number.isFinite);
  const [least, most] = [Math.min(...finite), Math.max(...finite)].map((v) => write(v, c.unit, 3));
  byId("legend").replaceChildren(`dark ${least} `, make("span", {class: "ramp", role: "presentation"}), ` light ${most}`,
    c.better ? ` (${BETTER[c.better]})` : "");
  ramp();
}

function ramp() {
  const bar = document.querySelector(".ramp");
  if (bar && palette) bar.style.background = `linear-gradient(90deg, ${palette.join(",")})`;
}

// Show which designs are left and which are picked.
function refreshViews() {
  if (!plots) return;
  plots.get_model_by_name("kept").booleans = [...kept];
  plots.get_model_by_name("picked").indices = choice.a === null ? [] : [choice.a];
  plots.get_model_by_name("compared").indices = choice.b === null ? [] : [choice.b];
}

let allColours = null;

function paint(theme) {
  if (!plots) return;
  const ink = INKS[theme];
  const mapper = plots.get_model_by_name("colours");
  allColours = allColours || [...mapper.palette];
  mapper.palette = allColours.slice(ink.low, ink.high);
  palette = mapper.palette.map((c) => (typeof c === "number" ? `#${(c >>> 8).toString(16).padStart(6, "0")}` : c));
  for (const plot of plots.roots()) {
    plot.setv({background_fill_color: ink.paper, border_fill_color: ink.paper, outline_line_color: ink.grid});
    for (const axis of [...plot.below, ...plot.left]) {
      axis.setv({axis_label_text_color: ink.ink, major_label_text_color: ink.ink, axis_line_color: ink.soft,
        major_tick_line_color: ink.soft, minor_tick_line_color: null, axis_label_text_font_size: "14px",
        axis_label_text_font_style: "normal", major_label_text_font_size: "13px"});
    }
    for (const part of plot.center) {
      if (part.location === undefined && part.grid_line_color !== undefined) part.grid_line_color = ink.grid;
      else if (part.dimension === "width" || part.dimension === "height") part.line_color = ink.bound;
    }
    for (const renderer of plot.renderers) paintGlyphs(renderer, ink);
  }
  ramp();
}

function paintGlyphs(renderer, ink) {
  const letter = /-([AB])$/.exec(renderer.name || "");
  if (letter) {
    const colour = letter[1] === "A" ? ink.a : ink.b;
    if (renderer.name.startsWith("ring")) renderer.glyph.line_color = colour;
    else renderer.glyph.setv({text_color: ink.paper, background_fill_color: colour});
  } else if (renderer.name === "all") {
    renderer.glyph.setv({line_color: ink.dot, line_alpha: 0.6});
  } else if (renderer.name === "left") {
    for (const glyph of [renderer.glyph, renderer.selection_glyph, renderer.nonselection_glyph]) {
      glyph.line_color = ink.edge;
    }
  }
}

// Put the plots into the page; `onBrush` is called with the set of selected rows.
async function startViews(onBrush) {
  const json = JSON.parse(byId("plots").textContent);
  const roots = {};
  for (const root of json.roots) {
    const name = root.attributes.name;
    const frame = make("div", {class: "view", role: "group", id: `view-${name}`});
    if (name === "any") byId("any-views").append(frame);
    else if (name.startsWith("size-")) byId("size-views").append(frame);
    else byId("any-views").before(make("div", {class: "cell"}, make("h3", {id: `head-${name}`}), frame));
    roots[root.id] = `view-${name}`;
  }
  await Bokeh.embed.embed_items({page: json}, [{docid: "page", roots, root_ids: Object.keys(roots)}]);
  plots = Bokeh.documents.at(-1);
  source = plots.get_model_by_name("designs");
  source.selected.properties.indices.change.connect(() => onBrush(new Set(source.selected.indices)));
  draw();
  if (window.matchMedia("(pointer: coarse)").matches) {
    for (const plot of plots.roots()) leaveToFingers(plot);
  }
}

// A finger that goes up or down over a plot moves the page, until the reader chooses a tool for it.
function leaveToFingers(plot) {
  for (const tool of plot.toolbar.tools) if (["BoxSelectTool", "LassoSelectTool"].includes(tool.type)) tool.active = false;
  const events = Bokeh.index.find_one(plot)?.canvas_view?.events_el;
  if (events) events.style.touchAction = "pan-y";
}

const view = (name) => plots.roots().find((plot) => plot.name === name);
