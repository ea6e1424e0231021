// The sliders: two ends on one track for every measure that the problem names, and what is left between them.

const STEPS = 400;
const sliders = new Map();

// The finite ends of a column; a slider that is fully open also keeps what has no finite figure.
function ends(c) {
  const finite = values[c.key].filter(Number.isFinite);
  return finite.length ? [Math.min(...finite), Math.max(...finite)] : [0, 0];
}

function makeSlider(c) {
  const [least, most] = ends(c);
  const [low, high] = [place(c, least), place(c, most)];
  const at = (step) => (step <= 0 ? least : step >= STEPS ? most : value(c, low + (step / STEPS) * (high - low)));
  const step = (v) => (high > low ? Math.round(((place(c, v) - low) / (high - low)) * STEPS) : 0);
  const name = c.name.replaceAll("_", " ");
  const limit = limitOf.get(c.key);
  const bounds = limit ? Object.entries(limit.bounds).map(([n, b]) => boundText(c.key, n, b)).join(", ") : "";
  const note = [BETTER[c.better], bounds && `limit ${bounds}`].filter(Boolean).join("; ");
  const range = ["least", "most"].map((end, i) => make("input", {type: "range", min: 0, max: STEPS, value: i * STEPS,
    "aria-label": `${name}, ${end}`, "data-end": end}));
  const typed = ["least", "most"].map((end) => make("input", {type: "text", "aria-label": `${name}, ${end}, typed`,
    title: `a bare number is in ${c.shown || "no unit"}`, autocomplete: "off", size: 8}));
  const track = make("div", {class: "track"}, make("div", {class: "filled"}), ...range);
  const box = make("fieldset", {"data-key": c.key}, make("legend", {}, heading(c)),
    make("p", {class: "hint"}, note), track,
    make("div", {class: "typed"}, typed[0], make("span", {}, "to"), typed[1]));
  if (!(most > least)) for (const input of [...range, ...typed]) input.disabled = true;

  function set(bounds, from = null) {
    if (bounds[0] === null && bounds[1] === null) choice.bounds.delete(c.key);
    else choice.bounds.set(c.key, bounds);
    show(from);
    refresh();
  }
  function show(from = null) {
    const bounds = choice.bounds.get(c.key) || [null, null];
    [0, 1].forEach((i) => {
      const v = bounds[i] ?? [least, most][i];
      if (range[i] !== from) range[i].value = bounds[i] === null ? i * STEPS : Math.min(STEPS, Math.max(0, step(v)));
      range[i].setAttribute("aria-valuetext", write(v, c.unit));
      typed[i].value = write(v, c.unit);
      typed[i].removeAttribute("aria-invalid");
    });
    const [a, b] = range.map((r) => (100 * r.value) / STEPS);
    track.firstChild.style.cssText = `left:${a}%;right:${100 - b}%`;
    box.classList.toggle("narrowed", bounds[0] !== null || bounds[1] !== null);
    range[0].style.zIndex = a > 50 ? 3 : 2; // the end that can still move is on top
  }
  range.forEach((input, i) => input.addEventListener("input", () => {
    const other = Number(range[1 - i].value);
    const own = i === 0 ? Math.min(Number(input.value), other) : Math.max(Number(input.value), other);
    input.value = own;
    const bounds = [...(choice.bounds.get(c.key) || [null, null])];
    bounds[i] = own === i * STEPS ? null : at(own);
    set(bounds, input);
  }));
  typed.forEach((input, i) => {
    input.addEventListener("change", () => {
      const v = read(input.value, c);
      if (v === null) return input.setAttribute("aria-invalid", "true");
      const bounds = [...(choice.bounds.get(c.key) || [null, null])];
      bounds[i] = (i === 0 ? v <= least : v >= most) ? null : v;
      if (i === 0 && bounds[1] !== null && v > bounds[1]) bounds[1] = null;
      if (i === 1 && bounds[0] !== null && v < bounds[0]) bounds[0] = null;
      return set(bounds);
    });
    input.addEventListener("blur", () => show());
  });
  show();
  return {box, show};
}

function startSliders() {
  for (const c of record.columns.filter((x) => x.kind === "goal" || x.kind === "named")) {
    const slider = makeSlider(c);
    sliders.set(c.key, slider);
    byId("sliders").append(slider.box);
  }
  byId("widen").addEventListener("click", () => {
    choice.bounds.clear();
    for (const slider of sliders.values()) slider.show();
    refresh();
  });
}

// Which designs every slider keeps; rounding aside.
function narrow() {
  kept.fill(true);
  for (const [key, [low, high]] of choice.bounds) {
    values[key].forEach((v, row) => {
      const slack = 1e-8 * Math.abs(v);
      if ((low !== null && !(v >= low - slack)) || (high !== null && !(v <= high + slack))) kept[row] = false;
    });
  }
}

function sayCount() {
  const left = kept.filter(Boolean).length;
  byId("count").textContent = `${left} of ${count} designs`;
  const some = [...brushed].filter((row) => kept[row]).length;
  byId("brushed").textContent = brushed.size ? `${some} of them selected` : "";
}
