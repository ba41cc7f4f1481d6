// Data of the page: decoded once, on first use.
const page = JSON.parse(document.getElementById("report-data").textContent);
const nHour = page.hours.label.length;
const nBus = page.buses.id.length;
const PARTS = Object.keys(page.components).filter((name) => name !== "lmp");
const decoded = new Map();

function decode(reference) {
  if (!decoded.has(reference.id)) {
    const element = document.getElementById(reference.id);
    const text = atob(element.textContent);
    const bytes = new Uint8Array(text.length);
    for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
    const kinds = { Float32Array, Int32Array, Uint32Array, Uint16Array, Uint8Array };
    decoded.set(reference.id, new kinds[reference.type](bytes.buffer));
    element.textContent = "";
  }
  return decoded.get(reference.id);
}

// A matrix of all buses and hours, hour running fastest.
const matrices = new Map();
function expand(reference, rows) {
  const full = new Float32Array(rows * nHour);
  if (reference.kind === "missing") return full.fill(NaN);
  if (reference.kind === "zero") return full;
  const stored = decode(reference);
  if (reference.kind === "full") return stored;
  for (let row = 0; row < rows; row++) full.set(stored, row * nHour);
  return full;
}

function prices(set, component) {
  const key = `${set}/${component}`;
  if (!matrices.has(key)) {
    const reference = page.prices[set][component];
    let values;
    if (reference.kind === "sum") {
      values = new Float32Array(nBus * nHour);
      const parts = PARTS.filter((part) => page.prices[set][part].kind !== "missing").map((part) => prices(set, part));
      for (let i = 0; i < values.length; i++) {
        let total = 0;
        for (const part of parts) total += part[i];
        values[i] = total;
      }
    } else {
      values = expand(reference, nBus);
    }
    matrices.set(key, values);
  }
  return matrices.get(key);
}

// The chosen figure at every bus and hour: one price set, or the difference of two.
let shownKey = "";
let shownValues = null;
function shown() {
  const key = `${choice.against}|${choice.base}|${choice.component}`;
  if (key !== shownKey) {
    const above = prices(choice.against, choice.component);
    if (choice.base) {
      const below = prices(choice.base, choice.component);
      shownValues = new Float32Array(above.length);
      for (let i = 0; i < above.length; i++) shownValues[i] = above[i] - below[i];
    } else {
      shownValues = above;
    }
    shownKey = key;
  }
  return shownValues;
}

function percentile(values, share) {
  const sorted = values.filter((value) => !Number.isNaN(value)).sort();
  if (!sorted.length) return NaN;
  const place = (sorted.length - 1) * share;
  const low = Math.floor(place);
  const high = Math.min(low + 1, sorted.length - 1);
  return sorted[low] + (sorted[high] - sorted[low]) * (place - low);
}

// Colour range of what is shown: centred on zero for a difference, from low to high for a price.
let rangeKey = "";
let rangeValue = null;
function colourRange() {
  const values = shown();
  if (rangeKey !== shownKey) {
    if (choice.base) {
      const bound = Math.max(percentile(values.map(Math.abs), 0.98) || 0, 0.5);
      rangeValue = { low: -bound, high: bound, bound };
    } else {
      const low = percentile(values, 0.02) || 0;
      const high = Math.max(percentile(values, 0.98) || 0, low + 0.5);
      rangeValue = { low, high, bound: Math.max(Math.abs(low), Math.abs(high)) };
    }
    rangeKey = shownKey;
  }
  return rangeValue;
}

function insideInterval(bus, hour) {
  const block = page.inside.find((entry) => entry.base === choice.base && entry.against === choice.against);
  if (!block) return false;
  const cells = decode(block.cells);
  const wanted = bus * nHour + hour;
  let low = 0;
  let high = cells.length - 1;
  while (low <= high) {
    const middle = (low + high) >> 1;
    if (cells[middle] === wanted) return true;
    if (cells[middle] < wanted) low = middle + 1;
    else high = middle - 1;
  }
  return false;
}

// Amounts are kept in three bytes each.
function packed(reference, i) {
  const bytes = decode(reference);
  return (((bytes[3 * i] | (bytes[3 * i + 1] << 8) | (bytes[3 * i + 2] << 16)) << 8) >> 8) * reference.step;
}

// Drivers of one bus and hour, largest first; null where none were kept.
function driversAt(bus, hour) {
  for (const block of page.drivers) {
    const straight = block.base === choice.base && block.against === choice.against;
    const turned = block.base === choice.against && block.against === choice.base;
    if (!straight && !turned) continue;
    const start = decode(block.start);
    const cell = bus * nHour + hour;
    if (start[cell] === start[cell + 1]) return block.complete ? [] : null;
    const key = decode(block.key);
    const rows = [];
    for (let i = start[cell]; i < start[cell + 1]; i++) {
      rows.push({
        kind: block.kinds[key[i]],
        constraint: block.constraints[key[i]],
        amount: turned ? -packed(block.amount, i) : packed(block.amount, i),
        onlyIn: block.kinds[key[i]] === "binds only in base" ? block.base : block.kinds[key[i]] === "binds only in against" ? block.against : "",
      });
    }
    return rows;
  }
  return null;
}

function verdict(set, hour) {
  const reference = page.verdicts.code[set];
  if (!reference) return null;
  const code = decode(reference)[hour];
  if (code < 0) return { word: "not solved", usable: false };
  return { word: page.verdicts.words[code], usable: page.verdicts.usable[code] };
}

// Texts.
const formats = new Map();
function figure(value, signed = false, decimals = 2) {
  if (value === null || value === undefined || Number.isNaN(value)) return "\u2014";
  if (!formats.has(decimals)) formats.set(decimals, new Intl.NumberFormat("en-US", { minimumFractionDigits: decimals, maximumFractionDigits: decimals }));
  const size = formats.get(decimals).format(Math.abs(value));
  if (!/[1-9]/.test(size)) return size;
  return (value < 0 ? "\u2212" : signed ? "+" : "") + size;
}

function shorten(text, limit) {
  return text.length > limit ? `${text.slice(0, limit - 1).trimEnd()}\u2026` : text;
}

// A name inside a plotly label: its tags disarmed, its direction kept to itself.
function plotText(text, limit = 36) {
  const clean = shorten(text, limit).replaceAll("&", "&amp;").replaceAll("<", "&lt;").replaceAll(">", "&gt;").replaceAll("$", "&#36;");
  // eslint-disable-next-line no-control-regex
  return /^[\x00-\x7f]*$/.test(clean) ? clean : `\u2068${clean}\u2069`;
}

function busLabel(bus) {
  const { name, id } = page.buses;
  return name[bus] === id[bus] ? id[bus] : `${name[bus]} (${id[bus]})`;
}

const pairLabel = () => (choice.base ? `${choice.against} less ${choice.base}` : choice.against);
const partLabel = () => (choice.component === "lmp" ? "" : `, ${page.components[choice.component]}`);

const choice = { ...page.choice };
