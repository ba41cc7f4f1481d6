// Pictures: each has a drawing made in advance and a function that fills it for the present choice.
const CONFIG = { displayModeBar: false, responsive: false, doubleClick: "reset", showTips: false, scrollZoom: false };
const PRINT_WIDTH = 680;
const plots = new Map();
let rowOrder = [];
let rowsBy = "zone";
let sought = "";

function symbolOf(value, hollow) {
  const name = value > page.deadBand ? "triangle-up" : value < -page.deadBand ? "triangle-down" : "circle";
  return hollow ? `${name}-open` : name;
}

function orderRows() {
  const values = shown();
  const wanted = sought.trim().toLowerCase();
  const { name, id, zone, load } = page.buses;
  const rows = [];
  for (let bus = 0; bus < nBus; bus++) {
    if (!wanted || [name[bus], id[bus], zone[bus]].some((text) => text.toLowerCase().includes(wanted))) rows.push(bus);
  }
  const size = new Float64Array(nBus);
  if (rowsBy === "zone" || rowsBy === "size") {
    for (const bus of rows) {
      let total = 0;
      for (let i = bus * nHour; i < (bus + 1) * nHour; i++) total += Math.abs(values[i]) || 0;
      size[bus] = total;
    }
  }
  const text = (a, b) => (a < b ? -1 : a > b ? 1 : 0);
  const by = {
    zone: (a, b) => text(zone[a], zone[b]) || size[b] - size[a] || a - b,
    size: (a, b) => size[b] - size[a] || a - b,
    load: (a, b) => load[b] - load[a] || a - b,
    name: (a, b) => name[a].localeCompare(name[b], "en", { numeric: true }) || a - b,
  };
  rowOrder = rows.sort(by[rowsBy]);
}

const fill = {
  map(spec, plot) {
    const values = shown();
    const range = colourRange();
    const marker = spec.data[1].marker;
    const few = nBus <= 70;
    const [small, large] = few ? [9, 20] : nBus <= 400 ? [6, 14] : [3.5, 9];
    const here = Array.from({ length: nBus }, (_, bus) => values[bus * nHour + choice.hour]);
    marker.color = here.map((value) => (Number.isNaN(value) ? null : value));
    marker.symbol = here.map((value, bus) => symbolOf(value, insideInterval(bus, choice.hour)));
    marker.size = here.map((value) => small + (large - small) * Math.sqrt(Math.min((Math.abs(value) || 0) / range.bound, 1)));
    Object.assign(marker, { cmin: range.low, cmax: range.high, colorscale: choice.base ? diverging() : sequential() });
    if (choice.base) marker.cmid = 0;
    else delete marker.cmid;
    const { name, zone } = page.buses;
    spec.data[1].customdata = here.map((value, bus) => [plotText(name[bus]), plotText(zone[bus]), figure(value, Boolean(choice.base))]);
    spec.data[2].x = [decode(page.buses.x)[choice.bus]];
    spec.data[2].y = [decode(page.buses.y)[choice.bus]];
    const frame = mapFrame(spec, plot);
    spec.layout.height = frame.height;
    if (few) spec.data[1].text = mapLabels(frame, here);
    Object.assign(marker.colorbar, { len: frame.width < 560 ? 0.94 : 0.5, nticks: 5, tickangle: 0 });
    return `${pairLabel()}${partLabel()}, ${page.hours.label[choice.hour]}`;
  },

  heatmap(spec) {
    orderRows();
    const values = shown();
    const range = colourRange();
    const trace = spec.data[0];
    trace.z = rowOrder.map((bus) => values.subarray(bus * nHour, (bus + 1) * nHour));
    Object.assign(trace, { zmin: range.low, zmax: range.high, colorscale: choice.base ? diverging() : sequential() });
    if (choice.base) trace.zmid = 0;
    else delete trace.zmid;
    const n = rowOrder.length;
    const height = Math.min(Math.max(90 + 17 * n, 220), spec.layout.height0 ?? (spec.layout.height0 = spec.layout.height));
    spec.layout.height = height;
    const axis = spec.layout.yaxis;
    axis.range = [Math.max(n, 1) - 0.5, -0.5];
    const shapes = [];
    const narrow = window.innerWidth < 640;
    const zones = rowsBy === "zone" && !sought;
    const named = n <= 60;
    if (zones) {
      if (!named) axis.tickvals = [];
      if (!named) axis.ticktext = [];
      let first = 0;
      for (let row = 1; row <= n; row++) {
        if (row === n || page.buses.zone[rowOrder[row]] !== page.buses.zone[rowOrder[first]]) {
          if (!named && row - first >= n / 60) {
            axis.tickvals.push((first + row - 1) / 2);
            axis.ticktext.push(plotText(page.buses.zone[rowOrder[first]] || "no zone", narrow ? 9 : 18));
          }
          if (row < n) shapes.push({ type: "line", x0: -0.5, x1: nHour - 0.5, y0: row - 0.5, y1: row - 0.5, line: { color: page.palette.light.ink, width: 1 } });
          first = row;
        }
      }
    }
    if (!zones || named) {
      const every = Math.max(1, Math.ceil(n / 60));
      axis.tickvals = [];
      axis.ticktext = [];
      for (let row = 0; row < n; row += every) {
        axis.tickvals.push(row);
        axis.ticktext.push(plotText(page.buses.name[rowOrder[row]], narrow ? 9 : 20));
      }
    }
    axis.tickfont = { ...axis.tickfont, size: named && n > 35 ? 10 : 12 };
    if (printing) spec.layout.height = Math.min(spec.layout.height, 560);
    const row = rowOrder.indexOf(choice.bus);
    const frame = { color: page.palette.light.ink, width: 1.2 };
    shapes.unshift({ type: "rect", x0: choice.hour - 0.5, x1: choice.hour + 0.5, y0: -0.5, y1: Math.max(n, 1) - 0.5, line: frame });
    if (row >= 0) shapes.push({ type: "rect", x0: -0.5, x1: nHour - 0.5, y0: row - 0.5, y1: row + 0.5, line: frame });
    spec.layout.shapes = shapes;
    const found = document.getElementById("found");
    found.textContent = sought ? `${n} of ${nBus} buses` : "";
    return `${pairLabel()}${partLabel()}, ${page.currency}/MWh`;
  },

  duration(spec) {
    const values = shown();
    const fixed = spec.fixed ?? (spec.fixed = spec.data.length);
    spec.data.length = fixed;
    const least = spec.layout.yaxis.type === "log" ? 0.005 : 0;
    const own = values.slice(choice.bus * nHour, (choice.bus + 1) * nHour).map(Math.abs).filter((value) => !Number.isNaN(value)).sort().reverse();
    spec.data.push({
      type: "scatter",
      mode: "lines",
      name: `${plotText(page.buses.name[choice.bus], 18)}, as chosen`,
      x: Array.from(own, (_, i) => (own.length > 1 ? (100 * i) / (own.length - 1) : 0)),
      y: Array.from(own, (value) => Math.max(value, least)),
      line: { color: page.palette.light.above_2, width: 1.6, shape: "hv" },
      hovertemplate: "%{y:.2f}",
    });
    return `all buses and hours, and ${page.buses.name[choice.bus]}`;
  },

  profile(spec) {
    const values = shown();
    const endings = [...new Set(page.hours.ending)].sort((a, b) => a - b);
    const place = new Map(endings.map((ending, i) => [ending, i]));
    const sums = endings.map(() => ({ size: 0, mean: 0, own: 0, count: 0, ownCount: 0 }));
    for (let hour = 0; hour < nHour; hour++) {
      const sum = sums[place.get(page.hours.ending[hour])];
      for (let bus = 0; bus < nBus; bus++) {
        const value = values[bus * nHour + hour];
        if (Number.isNaN(value)) continue;
        sum.size += Math.abs(value);
        sum.mean += value;
        sum.count += 1;
        if (bus === choice.bus) {
          sum.own += value;
          sum.ownCount += 1;
        }
      }
    }
    const mean = (total, count) => (count ? total / count : null);
    spec.data.forEach((trace) => (trace.x = endings));
    spec.data[0].y = sums.map((sum) => mean(sum.size, sum.count));
    spec.data[1].y = sums.map((sum) => mean(sum.mean, sum.count));
    spec.data[2].y = sums.map((sum) => mean(sum.own, sum.ownCount));
    spec.data[2].name = plotText(page.buses.name[choice.bus], 22);
    return `${pairLabel()}${partLabel()}`;
  },

  waterfall(spec) {
    const cell = choice.bus * nHour + choice.hour;
    const base = choice.base || choice.against;
    const start = prices(base, "lmp")[cell];
    const end = prices(choice.against, "lmp")[cell];
    const missing = PARTS.some((part) => Number.isNaN(prices(choice.against, part)[cell]) !== Number.isNaN(prices(base, part)[cell]));
    const names = PARTS.slice();
    let steps = names.map((part) => prices(choice.against, part)[cell] - prices(base, part)[cell]);
    if (missing) {
      // a price set without one component (posted prices have no reactive part): what it lacks counts as nothing
      steps = names.map((part) => (prices(choice.against, part)[cell] || 0) - (prices(base, part)[cell] || 0));
    }
    const rest = end - start - steps.reduce((total, step) => total + (step || 0), 0);
    if (Math.abs(rest) >= 0.005) {
      names.push("rest");
      steps.push(rest);
    }
    const levels = [start];
    steps.forEach((step) => levels.push(levels[levels.length - 1] + (step || 0)));
    const finish = base === choice.against ? `${choice.against} ` : choice.against;
    const categories = [base, ...names, finish];
    const light = page.palette.light;
    Object.assign(spec.data[0], { x: names, base: levels.slice(0, -1), y: steps.map((step) => step || 0), text: steps.map((step) => figure(step, true)) });
    spec.data[0].marker.color = steps.map((step) => (step >= 0 ? light.above_2 : light.below_2));
    Object.assign(spec.data[1], { x: [base, finish], y: [start, end], text: [figure(start), figure(end)] });
    spec.data[1].marker.line.color = [light[base] ?? light.other, light[choice.against] ?? light.other];
    const x = [];
    const y = [];
    for (let i = 0; i < categories.length - 1; i++) {
      x.push(categories[i], categories[i + 1], null);
      y.push(levels[i], levels[i], null);
    }
    Object.assign(spec.data[2], { x, y });
    const low = Math.min(...levels);
    const high = Math.max(...levels);
    const room = Math.max(0.18 * (high - low), 0.4);
    spec.layout.xaxis.categoryarray = categories;
    spec.layout.yaxis.range = [low - room, high + 1.6 * room];
    return `${page.buses.name[choice.bus]}, ${page.hours.label[choice.hour]}`;
  },

  ladder: () => "all buses and hours",
  hubs: () => `week means, ${page.currency}/MWh`,
  sweep: () => "all buses, hours and load factors solved",
  stakes: () => `posted less recomputed, ${page.currency} over the week`,

  binding(spec) {
    moveHourLine(spec);
    return "all formulations";
  },

  shadow(spec) {
    moveHourLine(spec);
    const { name, unit, shadow } = page.constraints;
    Object.values(shadow).forEach((reference, i) => {
      spec.data[i].y = expand(reference, name.length).subarray(choice.constraint * nHour, (choice.constraint + 1) * nHour);
    });
    spec.layout.yaxis.title.text = `${plotText(page.currency, 12)} per ${unit[choice.constraint] || "unit"} and hour`;
    return name[choice.constraint];
  },

  losses(spec) {
    moveHourLine(spec);
    return "whole network";
  },

  verdicts(spec) {
    moveHourLine(spec);
    return "every interval and formulation";
  },

  factors(spec) {
    const all = spec.points ?? (spec.points = spec.data.slice(1, 3).flatMap((trace) => {
      const x = typed(trace.x);
      const y = typed(trace.y);
      const custom = typed2(trace.customdata);
      return Array.from(x, (value, i) => ({ x: value, y: y[i], custom: custom[i], text: trace.text[i] }));
    }));
    const own = all.filter((point) => point.custom[0] === choice.bus);
    Object.assign(spec.data[3], { x: own.map((p) => p.x), y: own.map((p) => p.y), customdata: own.map((p) => p.custom), text: own.map((p) => p.text) });
    spec.data[3].name = plotText(page.buses.name[choice.bus], 22);
    return `one point per bus and hour; ${page.buses.name[choice.bus]} is marked`;
  },
};

// Height and scale of the map: as high as its shape asks for, within reason.
function mapFrame(spec, plot) {
  const xs = decode(page.buses.x);
  const ys = decode(page.buses.y);
  const span = (values) => {
    let low = Infinity;
    let high = -Infinity;
    for (const value of values) {
      if (value < low) low = value;
      if (value > high) high = value;
    }
    return [low, Math.max(high - low, 1e-9)];
  };
  const [left, wide] = span(xs);
  const [bottom, tall] = span(ys);
  const width = plot.width();
  const bound = spec.layout.yaxis.scaleanchor;
  const inner = width - 60;
  const height = Math.round(Math.min(Math.max(bound ? (inner * tall) / wide + 110 : 560, 320), width < 560 ? 440 : 620));
  const scaleX = bound ? Math.min(inner / wide, (height - 110) / tall) : inner / wide;
  const scaleY = bound ? scaleX : (height - 110) / tall;
  return { width, height, x: (bus) => (xs[bus] - left) * scaleX, y: (bus) => (bottom - ys[bus]) * scaleY };
}

// Names beside the marks; where two would overlap, the bus with the larger figure keeps its name.
function mapLabels(frame, here) {
  const order = here.map((_, bus) => bus).sort((a, b) => (b === choice.bus) - (a === choice.bus) || Math.abs(here[b] || 0) - Math.abs(here[a] || 0));
  const taken = here.map((_, bus) => ({ left: frame.x(bus) - 7, right: frame.x(bus) + 7, top: frame.y(bus) - 7, bottom: frame.y(bus) + 7, bus }));
  const texts = here.map(() => "");
  for (const bus of order) {
    const text = shorten(page.buses.name[bus], 18);
    const half = 3.2 * text.length + 2;
    const box = { left: frame.x(bus) - half, right: frame.x(bus) + half, top: frame.y(bus) + 6, bottom: frame.y(bus) + 23, bus };
    if (taken.some((other) => other.bus !== bus && other.left < box.right && other.right > box.left && other.top < box.bottom && other.bottom > box.top)) continue;
    taken.push(box);
    texts[bus] = plotText(text, 18);
  }
  return texts;
}

function moveHourLine(spec) {
  Object.assign(spec.layout.shapes[0], { x0: choice.hour, x1: choice.hour });
}

// Arrays of the drawings made in advance are embedded as base64 with their type.
function typed(value) {
  if (!value || !value.bdata) return value ?? [];
  const kinds = { f4: Float32Array, f8: Float64Array, i1: Int8Array, i2: Int16Array, i4: Int32Array, u1: Uint8Array, u2: Uint16Array, u4: Uint32Array };
  const text = atob(value.bdata);
  const bytes = new Uint8Array(text.length);
  for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
  return new kinds[value.dtype](bytes.buffer);
}

function typed2(value) {
  if (!value || !value.bdata) return value ?? [];
  const flat = typed(value);
  const width = Number(String(value.shape).split(",")[1]);
  return Array.from({ length: flat.length / width }, (_, i) => Array.from(flat.subarray(i * width, (i + 1) * width)));
}

const FOLLOWS = {
  map: ["pair", "bus", "hour"],
  heatmap: ["pair", "bus", "hour", "rows"],
  duration: ["pair", "bus"],
  profile: ["pair", "bus"],
  waterfall: ["pair", "bus", "hour"],
  binding: ["hour"],
  shadow: ["hour", "constraint"],
  losses: ["hour"],
  verdicts: ["hour"],
  factors: ["bus"],
};

class Plot {
  constructor(element) {
    this.element = element;
    this.slot = element.dataset.slot;
    this.spec = page.figures[this.slot];
    this.near = false;
    this.stale = true;
    this.drawn = false;
  }

  draw() {
    this.stale = false;
    const subject = fill[this.slot](this.spec, this);
    document.querySelector(`[data-subject="${this.slot}"]`).textContent = subject;
    const layout = themed({ ...this.spec.layout, width: this.width() });
    shortDays(layout);
    if (!printing && window.innerWidth < 640) narrow(layout, this.slot);
    Plotly.react(this.element, themed(this.spec.data), layout, CONFIG);
    if (!this.drawn) {
      this.drawn = true;
      this.element.on("plotly_click", (event) => clicked(this.slot, event.points[0]));
      if (this.slot === "heatmap") {
        this.element.on("plotly_hover", (event) => showTip(event));
        this.element.on("plotly_unhover", hideTip);
      }
    }
    this.element.style.minHeight = `${layout.height}px`;
    this.element.dataset.ready = "yes";
  }

  width() {
    return printing ? PRINT_WIDTH : this.element.clientWidth || 600;
  }

  refresh(what) {
    if (what !== "all" && !(FOLLOWS[this.slot] ?? []).includes(what)) return;
    this.stale = true;
    if (this.near) this.draw();
  }
}

// Day names lose their month where they would run into each other.
function shortDays(layout) {
  const names = layout.xaxis?.ticktext;
  if (!names || !/^\w{3} \d+ \w{3}$/.test(names[0])) return;
  const room = (layout.width - layout.margin.l - layout.margin.r - 90) / names.length;
  if (room < 78) layout.xaxis = { ...layout.xaxis, ticktext: names.map((text) => text.replace(/ \w{3}$/, "")) };
}

// On a phone: less margin, legends above in two lines, smaller map.
function narrow(layout, slot) {
  layout.margin = { ...layout.margin, l: Math.min(layout.margin.l, 64), r: 8 };
  if (layout.xaxis?.tickvals && layout.xaxis.ticktext?.[0]?.includes(" ")) {
    layout.xaxis = { ...layout.xaxis, ticktext: layout.xaxis.ticktext.map((text) => text.split(" ")[0]), tickfont: { ...layout.xaxis.tickfont, size: 10 } };
  }
  if (["binding", "stakes"].includes(slot)) {
    layout.yaxis = { ...layout.yaxis, ticktext: layout.yaxis.ticktext.map((text) => (text.length > 16 ? `${text.slice(0, 15)}\u2026` : text)), tickfont: { ...layout.yaxis.tickfont, size: 11 } };
  }
}

const tip = document.getElementById("tip");
function showTip(event) {
  const point = event.points[0];
  const bus = rowOrder[point.y];
  if (bus === undefined) return;
  const value = shown()[bus * nHour + point.x];
  tip.textContent = `${shorten(page.buses.name[bus], 60)}\n${page.hours.label[point.x]}: ${figure(value, Boolean(choice.base))} ${page.currency}/MWh`;
  tip.hidden = false;
  const { clientX, clientY } = event.event;
  const box = tip.getBoundingClientRect();
  tip.style.left = `${Math.min(clientX + 14, window.innerWidth - box.width - 8)}px`;
  tip.style.top = `${Math.max(clientY - box.height - 12, 8)}px`;
}

function hideTip() {
  tip.hidden = true;
}

function clicked(slot, point) {
  if (slot === "map" && point.curveNumber === 1) choose({ bus: point.pointNumber });
  else if (slot === "heatmap") choose({ hour: point.x, bus: rowOrder[point.y] });
  else if (slot === "profile") chooseEnding(Math.round(point.x));
  else if (slot === "binding") choose({ hour: Math.round(point.x), constraint: Math.round(point.y) });
  else if (["shadow", "losses", "verdicts"].includes(slot)) choose({ hour: Math.round(point.x) });
  else if (slot === "factors" && point.customdata) choose({ bus: point.customdata[0], hour: point.customdata[1] });
}

// The same hour ending on the day that is chosen now.
function chooseEnding(ending) {
  const starts = page.hours.dayPosition;
  const day = starts.filter((position) => position <= choice.hour).pop() ?? 0;
  const next = starts.find((position) => position > choice.hour) ?? nHour;
  for (let hour = day; hour < next; hour++) if (page.hours.ending[hour] === ending) return choose({ hour });
}
