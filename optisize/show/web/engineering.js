// SI numbers to engineering text and back, as everywhere in optisize: 2.5e-7 A is "250 nA".

const PREFIXES = [[12, "T"], [9, "G"], [6, "M"], [3, "k"], [0, ""], [-3, "m"], [-6, "u"], [-9, "n"], [-12, "p"],
  [-15, "f"], [-18, "a"]];
const PREFERRED = {"m^2": [1e-12, "um^2"], "V/s": [1e6, "V/us"]}; // a prefix on an area would count twice
const UNPREFIXED = ["", "dB", "deg", "V/V", "1/V", "%"];
const PER_ROOT = /\/(\w+)\^0\.5/; // as units are kept; people write a root sign

// The unit as people write it: V/√Hz for V/Hz^0.5.
const written = (unit) => unit.replace(PER_ROOT, "/√$1");

// A number with that many significant digits and no zeros at its end; never with an exponent where it can be read.
function figure(value, digits = 4) {
  const rounded = Number(value.toPrecision(digits));
  return Math.abs(rounded) >= 1e-4 && Math.abs(rounded) < 1e9 || rounded === 0
    ? plain(rounded) : rounded.toExponential().replace(/e([+-])(\d)$/, "e$10$2");
}

function plain(number) {
  const text = String(number);
  return text.includes("e") ? number.toFixed(12).replace(/0+$/, "") : text;
}

// A quantity with its unit, the prefix chosen so that one to three digits stand before the point.
function write(value, unit, digits = 4) {
  if (value === null || Number.isNaN(value)) return "undefined";
  if (!Number.isFinite(value)) return value > 0 ? "unlimited" : "-unlimited";
  if (unit in PREFERRED) return `${figure(value / PREFERRED[unit][0], digits)} ${PREFERRED[unit][1]}`;
  if (UNPREFIXED.includes(unit)) return `${figure(value, digits)} ${unit}`.trim();
  const [mantissa, prefix] = scaled(value, digits);
  return `${mantissa} ${prefix}${written(unit)}`;
}

// Mantissa and prefix: 2.5e-7 is ["250", "n"].
function scaled(value, digits) {
  if (value === 0) return ["0", ""];
  const [mantissa, power] = value.toExponential(digits - 1).split("e").map(Number);
  const exponent = 3 * Math.floor(power / 3);
  const found = PREFIXES.find(([e]) => e === exponent);
  if (!found) return [figure(value, digits), ""];
  return [plain(Number((mantissa * 10 ** (power - exponent)).toPrecision(digits))), found[1]];
}

// A difference, with its sign.
const signed = (value, unit, digits = 3) =>
  `${value > 0 ? "+" : value < 0 ? "\u2212" : ""}${write(Math.abs(value), unit, digits)}`;

const NUMBER = /^\s*([-+\u2212]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?)\s*(.*?)\s*$/i;

// The SI number of a text in the unit of a column: "6 uA", "6u" and, in the unit that the column shows, "6"; null
// where it is none.
function read(text, column) {
  const match = NUMBER.exec(text);
  if (!match) return null;
  const number = Number(match[1].replace("\u2212", "-"));
  const rest = match[2].replace(/[µμ]/g, "u").replace("²", "^2").replace(/Ω/g, "ohm").replace("sqrt(Hz)", "√Hz");
  if (rest === "" || rest === column.shown) return number * column.factor;
  const unit = written(column.unit);
  if (rest === unit) return number;
  if (column.unit in PREFERRED || UNPREFIXED.includes(column.unit)) return null;
  const found = PREFIXES.find(([, p]) => p !== "" && (rest === p || rest === p + unit));
  return found ? number * 10 ** found[0] : null;
}
