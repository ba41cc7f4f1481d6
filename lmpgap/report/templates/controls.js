// Controls: one choice of price sets, component, bus, hour and constraint for all pictures.
const byId = (id) => document.getElementById(id);

function option(value, text) {
  const element = document.createElement("option");
  element.value = value;
  element.textContent = text;
  return element;
}

function span(text, className) {
  const element = document.createElement(className === "strong" ? "b" : "span");
  element.textContent = text;
  if (className !== "strong") element.className = className;
  return element;
}

const busByLabel = new Map();

function setUp() {
  page.sets.forEach((set) => byId("against").append(option(set, set)));
  byId("base").append(option("", "nothing"));
  page.sets.forEach((set) => byId("base").append(option(set, set)));
  Object.entries(page.components).forEach(([name, words]) => byId("component").append(option(name, words)));
  for (let bus = 0; bus < nBus; bus++) {
    const label = busLabel(bus);
    busByLabel.set(label, bus);
    byId("bus-list").append(option(label, ""));
  }
  if (byId("constraint")) page.constraints.name.forEach((name, i) => byId("constraint").append(option(String(i), shorten(name, 60))));

  byId("against").addEventListener("change", (event) => choose({ against: event.target.value }));
  byId("base").addEventListener("change", (event) => choose({ base: event.target.value }));
  byId("component").addEventListener("change", (event) => choose({ component: event.target.value }));
  byId("bus").addEventListener("change", (event) => chooseBusText(event.target.value));
  byId("bus").addEventListener("focus", (event) => event.target.select());
  byId("hour").addEventListener("input", (event) => chooseSoon({ hour: Number(event.target.value) }));
  byId("earlier").addEventListener("click", () => choose({ hour: Math.max(choice.hour - 1, 0) }));
  byId("later").addEventListener("click", () => choose({ hour: Math.min(choice.hour + 1, nHour - 1) }));
  byId("constraint")?.addEventListener("change", (event) => choose({ constraint: Number(event.target.value) }));
  byId("sort").addEventListener("change", (event) => {
    rowsBy = event.target.value;
    plots.get("heatmap").refresh("rows");
  });
  byId("search").addEventListener("input", (event) => {
    sought = event.target.value;
    plots.get("heatmap").refresh("rows");
  });
  byId("theme").addEventListener("click", () => {
    root.dataset.theme = isDark() ? "light" : "dark";
    themeChanged();
  });
  darkMedia.addEventListener("change", themeChanged);
  document.addEventListener("click", (event) => {
    const toggle = event.target.closest("[data-toggle]");
    if (toggle) {
      const open = byId(toggle.dataset.toggle).classList.toggle("open");
      toggle.setAttribute("aria-expanded", String(open));
    }
    const pick = event.target.closest(".pick");
    if (pick) choose({ bus: Number(pick.dataset.bus), hour: Number(pick.dataset.hour) });
  });
}

// A bus by its label, identifier or name; otherwise the first that contains the text.
function chooseBusText(text) {
  let bus = busByLabel.get(text);
  if (bus === undefined) bus = page.buses.id.indexOf(text);
  if (bus < 0) {
    const wanted = text.trim().toLowerCase();
    bus = wanted ? page.buses.name.findIndex((name, i) => `${name} ${page.buses.id[i]}`.toLowerCase().includes(wanted)) : -1;
  }
  if (bus >= 0) choose({ bus });
  else showChoice();
}

let waiting = null;
function chooseSoon(change) {
  const first = waiting === null;
  waiting = { ...waiting, ...change };
  if (first) {
    requestAnimationFrame(() => {
      const change = waiting;
      waiting = null;
      choose(change);
    });
  }
}

function choose(change) {
  const before = { ...choice };
  Object.assign(choice, Object.fromEntries(Object.entries(change).filter(([, value]) => value !== undefined && value !== null)));
  const moved = new Set();
  if (["base", "against", "component"].some((key) => before[key] !== choice[key])) moved.add("pair");
  for (const key of ["bus", "hour", "constraint"]) if (before[key] !== choice[key]) moved.add(key);
  showChoice();
  for (const plot of plots.values()) {
    const reasons = FOLLOWS[plot.slot] ?? [];
    const reason = [...moved].find((what) => reasons.includes(what));
    if (reason) plot.refresh(reason);
  }
}

function showChoice() {
  byId("against").value = choice.against;
  byId("base").value = choice.base;
  byId("component").value = choice.component;
  byId("bus").value = busLabel(choice.bus);
  byId("hour").value = String(choice.hour);
  byId("hour").setAttribute("aria-valuetext", page.hours.label[choice.hour]);
  byId("hour-label").textContent = page.hours.label[choice.hour];
  if (byId("constraint")) byId("constraint").value = String(choice.constraint);
  showReadout();
  showDrivers();
}

function showReadout() {
  const cell = choice.bus * nHour + choice.hour;
  const readout = byId("readout");
  readout.replaceChildren();
  const add = (...parts) => readout.append(...parts);
  const name = document.createElement("bdi");
  name.append(span(shorten(page.buses.name[choice.bus], 60), "strong"));
  add(name, `, ${page.hours.label[choice.hour]}: `);
  const against = prices(choice.against, choice.component)[cell];
  if (choice.base) {
    const base = prices(choice.base, choice.component)[cell];
    const difference = against - base;
    add(`${choice.base}${partLabel()} ${figure(base)}, ${choice.against} ${figure(against)}, difference `);
    add(span(figure(difference, true), difference > 0 ? "up" : "down"), ` ${page.currency}/MWh. `);
    if (insideInterval(choice.bus, choice.hour)) add(span("Inside a price interval: not a divergence.", "doubt"), " ");
  } else {
    add(`${choice.against}${partLabel()} ${figure(against)} ${page.currency}/MWh. `);
  }
  for (const set of new Set([choice.base, choice.against])) {
    const found = set ? verdict(set, choice.hour) : null;
    if (found && !found.usable) add(span(`${set}: ${found.word}.`, "doubt"), " ");
  }
}

const DRIVER_WORDS = {
  "energy price": () => "from the energy price",
  "delivery factor": () => "from losses",
  reactive: () => "from reactive power and voltage",
  congestion: (row) => (row.constraint ? `from the limit ${row.constraint}` : "from congestion"),
  unsplit: () => "outside the price components",
};

// Both parts of one constraint are one cause; largest first.
function causes(rows) {
  const merged = new Map();
  for (const row of rows) {
    const limit = row.kind === "shadow price" || row.kind === "shift factor";
    const key = `${limit ? "limit" : row.kind}|${row.kind === "reactive" ? "" : row.constraint}`;
    const cause = merged.get(key) ?? { row, limit, amount: 0, price: 0, factor: 0 };
    cause.amount += row.amount;
    if (row.kind === "shadow price") cause.price += row.amount;
    if (row.kind === "shift factor") cause.factor += row.amount;
    merged.set(key, cause);
  }
  return [...merged.values()].sort((a, b) => Math.abs(b.amount) - Math.abs(a.amount));
}

function causeWords({ row, limit, price, factor }) {
  if (limit) {
    const name = `from the limit ${row.constraint}`;
    if (Math.abs(price) > 3 * Math.abs(factor)) return `${name}, whose shadow price differs`;
    if (Math.abs(factor) > 3 * Math.abs(price)) return `${name}, on which this bus weighs differently`;
    return `${name}, whose shadow price and shift factor differ`;
  }
  if (row.onlyIn) return `from the limit ${row.constraint}, which binds only in ${row.onlyIn}`;
  return DRIVER_WORDS[row.kind]?.(row) ?? `from ${row.kind}${row.constraint ? ` on ${row.constraint}` : ""}`;
}

// Why the two prices differ here, in words; the drivers of a bus and hour add up to its difference.
function showDrivers() {
  const sentence = byId("driver-sentence");
  const frame = byId("driver-table");
  frame.replaceChildren();
  if (!choice.base || choice.base === choice.against) {
    sentence.textContent = "Choose a second price set to see why two prices differ.";
    return;
  }
  const cell = choice.bus * nHour + choice.hour;
  const base = prices(choice.base, "lmp")[cell];
  const difference = prices(choice.against, "lmp")[cell] - base;
  const place = `At ${shorten(page.buses.name[choice.bus], 60)}, ${page.hours.label[choice.hour]}`;
  if (Number.isNaN(difference)) {
    sentence.textContent = `${place}, one of the two price sets has no price.`;
    return;
  }
  if (Math.abs(difference) < 0.005) {
    sentence.textContent = `${place}, ${choice.base} and ${choice.against} agree to the cent.`;
  } else {
    const side = difference > 0 ? "below" : "above";
    let text = `${place}, ${choice.base} is ${figure(Math.abs(difference))} ${page.currency}/MWh ${side} ${choice.against}`;
    const rows = driversAt(choice.bus, choice.hour);
    if (rows && rows.length) {
      // whole cents, so that the figures shown add up to the difference shown
      const sign = Math.sign(difference);
      const cents = Math.round(100 * Math.abs(difference));
      const named = causes(rows).slice(0, 3).map((cause) => ({ cents: Math.round(sign * 100 * cause.amount), words: causeWords(cause) })).filter((part) => part.cents !== 0);
      const rest = cents - named.reduce((total, part) => total + part.cents, 0);
      if (rest !== 0) named.push({ cents: rest, words: "from the rest" });
      const parts = named.map((part) => `${part.cents > 0 ? "" : "less "}${figure(Math.abs(part.cents) / 100)} ${part.words}`);
      text += `: ${parts.join("; ")}.`;
    } else {
      const parts = PARTS.map((part) => ({ part, step: (prices(choice.against, part)[cell] || 0) - (prices(choice.base, part)[cell] || 0) }))
        .filter((entry) => Math.abs(entry.step) >= 0.005)
        .sort((a, b) => Math.abs(b.step) - Math.abs(a.step));
      text += `: ${parts.map((entry) => `${figure(entry.step, true)} ${entry.part}`).join(", ")}. Its drivers are in the run folder.`;
    }
    sentence.textContent = text;
  }
  drawDriverTable(frame, driversAt(choice.bus, choice.hour), difference);
}

function drawDriverTable(frame, rows, difference) {
  if (!rows || !rows.length) return;
  const table = document.createElement("table");
  const caption = table.createCaption();
  caption.textContent = `Drivers of ${choice.against} less ${choice.base} here, ${page.currency}/MWh`;
  const head = table.createTHead().insertRow();
  for (const [text, className] of [["Driver", ""], ["Constraint", ""], ["Amount", "figure"]]) {
    const cell = document.createElement("th");
    cell.scope = "col";
    cell.textContent = text;
    cell.className = className;
    head.append(cell);
  }
  const body = table.createTBody();
  const total = rows.reduce((sum, row) => sum + row.amount, 0);
  const lines = rows.map((row) => [row.onlyIn ? `binds only in ${row.onlyIn}` : row.kind, row.constraint, row.amount]);
  if (Math.abs(difference - total) >= 0.005) lines.push(["smaller drivers", "", difference - total]);
  lines.push(["difference", "", difference]);
  for (const [driver, constraint, amount] of lines) {
    const line = body.insertRow();
    const first = document.createElement("th");
    first.scope = "row";
    first.textContent = driver;
    line.append(first);
    const name = document.createElement("bdi");
    name.textContent = constraint;
    line.insertCell().append(name);
    const cell = line.insertCell();
    cell.className = "figure";
    cell.textContent = figure(amount, true);
  }
  const scroll = document.createElement("div");
  scroll.className = "table-frame";
  scroll.append(table);
  frame.append(scroll);
}

function themeChanged() {
  byId("theme").textContent = isDark() ? "Light" : "Dark";
  byId("theme").setAttribute("aria-pressed", String(isDark()));
  for (const plot of plots.values()) plot.refresh("all");
}

function start() {
  setUp();
  showChoice();
  const watch = new IntersectionObserver(
    (entries) => {
      for (const entry of entries) {
        const plot = plots.get(entry.target.dataset.slot);
        plot.near = entry.isIntersecting;
        if (plot.near && plot.stale) plot.draw();
      }
    },
    { rootMargin: "500px 0px" },
  );
  document.querySelectorAll(".plot").forEach((element) => {
    const plot = new Plot(element);
    plots.set(plot.slot, plot);
    watch.observe(element);
  });
  themeChanged();
  let width = window.innerWidth;
  window.addEventListener("resize", () => {
    if (window.innerWidth === width || printing) return;
    width = window.innerWidth;
    for (const plot of plots.values()) plot.refresh("all");
  });
  const print = (state) => () => {
    if (printing === state) return;
    printing = state;
    for (const plot of plots.values()) if (state || plot.drawn) plot.draw();
  };
  window.addEventListener("beforeprint", print(true));
  window.addEventListener("afterprint", print(false));
  root.dataset.ready = "yes";
}

start();
