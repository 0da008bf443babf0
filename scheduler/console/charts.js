// Charts and tables. "@name" in a chart's description stands for a value of what is drawn.

import { drawSvg } from "./drawing.js";

function filled(node, values) {
  if (typeof node === "string" && node[0] === "@") {
    const value = values[node.slice(1)];
    return Array.isArray(value) ? value.slice() : value;
  }
  if (Array.isArray(node)) return node.map((item) => filled(item, values));
  if (node === null || typeof node !== "object") return node;
  return Object.fromEntries(Object.entries(node).map(([key, item]) => [key, filled(item, values)]));
}

export function drawChart(box, chart, values) {
  box.redraw = () => drawSvg(box, filled(chart.traces, values), filled(chart.layout, values), `${chart.question} ${chart.reading}`);
  box.redraw();
}

export function drawLegend(place, legend) {
  place.replaceChildren(...legend.map(([kind, words]) => {
    const entry = document.createElement("span");
    const swatch = document.createElement("i");
    swatch.className = kind;
    entry.append(swatch, words);
    return entry;
  }));
}

export function leaveOut(box, why) {
  box.redraw = box.points = null;
  const note = document.createElement("p");
  note.textContent = why;
  box.replaceChildren(note);
}

// What the chart of cost against risk draws: curve, the plan's point, its rivals, what is pinned.
export function frontierValues(curve, cases, pinned) {
  const points = { ...curve };
  for (const [key, name] of [["plan", "plan"], ["evenly", "evenly"], ["by_volume", "by_volume"]]) {
    points[`${name}_risk`] = [cases[key].risk_bps];
    points[`${name}_cost`] = [cases[key].cost_bps];
  }
  points.has_pin = Boolean(pinned);
  points.pin_risk = pinned ? [pinned.cases.plan.risk_bps] : [];
  points.pin_cost = pinned ? [pinned.cases.plan.cost_bps] : [];
  const all = (what) => roomy(["frontier", "plan", "evenly", "by_volume", "pin"].flatMap((k) => points[`${k}_${what}`]));
  points.risk_range = all("risk");
  points.frontier_range = all("cost");
  return points;
}

function roomy(values) {
  const low = Math.min(...values), high = Math.max(...values);
  const margin = 0.13 * (high - low) || 1;
  return [low - margin, high + margin];
}

// ---- numbers

const formats = [0, 1, 2].map((digits) => new Intl.NumberFormat("en-US", {
  minimumFractionDigits: digits, maximumFractionDigits: digits, signDisplay: "negative",
}));
const shareFormat = new Intl.NumberFormat("en-US", { maximumFractionDigits: 6 });

export const written = (value, digits = 0) =>
  (value === null || value === undefined ? "–" : formats[digits].format(value).replace("-", "\u2212"));

// ---- tables

function row(cells, tag) {
  const made = document.createElement("tr");
  cells.forEach((content, column) => {
    const cell = document.createElement(tag === "th" || column === 0 ? "th" : "td");
    if (tag === "th") cell.scope = "col";
    else if (column === 0) cell.scope = "row";
    cell.append(content);
    made.append(cell);
  });
  return made;
}

export function fillTable(table, header, rows) {
  const head = document.createElement("thead");
  head.append(row(header, "th"));
  const body = document.createElement("tbody");
  body.append(...rows.map((cells) => row(cells)));
  table.replaceChildren(head, body);
}

const CASES = [
  ["plan", "◆", "#123f6d", "this plan"],
  ["pinned", "★", "#1d2126", "pinned"],
  ["evenly", "■", "#bf5b17", "evenly timed"],
  ["by_volume", "●", "#45a394", "by volume"],
];

function named(glyph, colour, words) {
  const mark = document.createElement("span");
  mark.className = "glyph";
  mark.textContent = glyph;
  mark.style.color = colour;
  mark.setAttribute("aria-hidden", "true");
  const both = document.createElement("span");
  both.append(mark, ` ${words}`);
  return both;
}

export function drawCompared(table, view, pinned) {
  const money = view.currency || "money";
  const two = view.cases.plan.risk_most_bps !== undefined; // a list without a risk table
  const header = ["", "cost, bps", money, two ? "risk, bps: independent … as one" : "risk, bps", ...(two ? [] : [money, "cost + U × risk, bps"])];
  const cases = { ...view.cases, pinned: pinned?.cases.plan };
  const rows = CASES.filter(([key]) => cases[key]).map(([key, glyph, colour, words]) => {
    const c = cases[key];
    const risk = two
      ? [`${written(c.risk_bps, 2)} … ${written(c.risk_most_bps, 2)}`]
      : [written(c.risk_bps, 2), written(c.risk), written(key === "pinned" ? c.cost_bps + view.now.urgency * c.risk_bps : c.in_all_bps, 2)];
    return [named(glyph, colour, words), written(c.cost_bps, 2), written(c.cost), ...risk];
  });
  fillTable(table, header, rows);
  table.querySelector("tbody tr").className = "own";
}

const than = (value, more, less) =>
  (Math.abs(value) < 0.005 ? `the same` : `${written(Math.abs(value), 2)} bps ${value > 0 ? more : less}`);

export function differences(view, pinned) {
  const cases = { ...view.cases, pinned: pinned?.cases.plan };
  const found = CASES.filter(([key]) => key !== "plan" && cases[key]).map(([key, , , words]) => {
    const cost = cases[key].cost_bps - view.cases.plan.cost_bps;
    const risk = cases[key].risk_bps - view.cases.plan.risk_bps;
    const start = words[0].toUpperCase() + words.slice(1);
    const known = view.cases.plan.risk_most_bps === undefined; // a list has no one risk without a risk table
    return `${start}: cost ${than(cost, "more", "less")}${known ? `, risk ${than(risk, "more", "less")}` : ""}.`;
  });
  if (view.high !== null) found.push(`One time in 20 this plan costs more than ${written(view.high, 1)} bps.`);
  return found;
}

export function drawSlices(table, view) {
  const v = view.values;
  const header = ["bucket", "expected volume", "shares", "left", "share of volume, %", "price moved, bps", `cost, ${view.currency}`, `risk ahead, ${view.currency}`];
  fillTable(table, header, v.shares.map((shares, i) => [
    v.bucket[i], written(v.volume[i]), shareFormat.format(shares), shareFormat.format(v.remaining[i]),
    written(100 * v.participation[i], 1), written(v.moved[i], 2), written(v.slice_cost[i]), written(v.std_ahead[i]),
  ]));
}

export function drawOrders(table, view, choose) {
  const parts = view.orders.some((one) => one.part_of_risk !== null);
  const header = ["order", "side", "symbol", "shares", view.currency, "cost, bps", `cost, ${view.currency}`, "risk alone, bps", ...(parts ? ["part of risk, %"] : [])];
  fillTable(table, header, view.orders.map((one) => {
    const open = document.createElement("button");
    open.type = "button";
    open.textContent = one.order;
    open.addEventListener("click", () => choose(one.order));
    return [
      open, one.side, one.symbol, shareFormat.format(one.quantity), written(one.notional), written(one.cost_bps, 2),
      written(one.cost), written(one.risk_bps, 2), ...(parts ? [written(100 * one.part_of_risk, 2)] : []),
    ];
  }));
}

// A failure in words; of tables every problem, cell by cell.
export function drawTrouble(box, failure) {
  box.hidden = !failure;
  if (!failure) return box.replaceChildren();
  if (!failure.problems?.length) {
    const lines = failure.message.split("\n").map((text) => {
      const line = document.createElement("p");
      line.textContent = text;
      return line;
    });
    return box.replaceChildren(...lines);
  }
  const title = document.createElement("p");
  const count = failure.problems.length;
  title.textContent = `${count} problem${count === 1 ? "" : "s"}; nothing was changed.`;
  const table = document.createElement("table");
  fillTable(table, ["file", "row", "column", "value", "rule", "what to do"], failure.problems.map((p) =>
    [p.source, p.row ?? "", p.column ?? "", p.value ?? "", p.rule, p.remedy].map(String)));
  return box.replaceChildren(title, table);
}
