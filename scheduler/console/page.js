// What is asked for, asking for it, and showing the answer.
//
// One question is under way at a time. Settings moved meanwhile are asked for when its answer is
// there, the latest only; answers carry their question's number, and one that belongs to other
// tables or another order than those chosen now is dropped.

import { NAMES, makeControls } from "./settings.js";
import * as draw from "./charts.js";
import { PATTERNS, followPointer } from "./drawing.js";

const find = (id) => document.getElementById(id);
const KEY = document.querySelector("[name=console-key]").content;
const ALL = "all";
const PATIENCE = 150; // ms before a wait is spoken of
const REST = 250, LIST_REST = 1000; // ms without a move before a frontier is worked out
const LIST_LABELLED = [0.1, 1, 10];
const LIST_URGENCIES = [0, 0.01, 0.03, 0.1, 0.3, 1, 3, 10];

let known, controls, view, frontier;
let asked = { order: null, values: {} };
let pin = null; // { values, view }
let epoch = 0; // counts changes of tables and of order
let wanted = 0, answered = 0, busy = false;
let below, shownKind;

class Failure extends Error {
  constructor(data) {
    super(data.message);
    this.data = data;
  }
}

async function post(what, body) {
  const form = body instanceof FormData;
  let response;
  try {
    response = await fetch(`/api/${what}`, {
      method: "POST",
      headers: { "X-Console-Key": KEY, ...(form ? {} : { "Content-Type": "application/json" }) },
      body: form ? body : JSON.stringify(body),
    });
  } catch {
    throw new Failure({ message: "The console does not answer: was it stopped? Start it again and reload this page." });
  }
  const isData = (response.headers.get("Content-Type") ?? "").startsWith("application/json");
  if (response.ok) return isData ? response.json() : response.blob();
  throw new Failure(isData ? await response.json() : { message: `Something failed (${response.status}); the console's terminal says more.` });
}

// ---- the address holds the state

const PIN = "pin.";

function writeAddress() {
  const state = new URLSearchParams({ tables: known.desk.mark, order: asked.order ?? ALL });
  for (const [name, value] of Object.entries(asked.values)) state.set(name, value);
  if (pin) {
    state.set(PIN, "yes");
    for (const [name, value] of Object.entries(pin.values)) state.set(PIN + name, value);
  }
  if (asked.order === ALL) state.set("order", `=${ALL}`); // an order of that very name
  const text = `#${state}`;
  if (text !== location.hash) history.replaceState(null, "", text);
}

function readAddress() {
  const state = new URLSearchParams(location.hash.slice(1));
  const values = (start) => Object.fromEntries(
    NAMES.filter((name) => state.has(start + name)).map((name) => {
      const text = state.get(start + name);
      const isNumber = text.trim() !== "" && Number.isFinite(Number(text));
      return [name, isNumber ? Number(text) : text];
    }));
  const order = state.get("order");
  return {
    mark: state.get("tables"),
    order: order === `=${ALL}` ? ALL : order === ALL ? null : order,
    hasOrder: state.has("order"),
    values: values(""),
    pin: state.has(PIN) ? values(PIN) : null,
  };
}

// ---- asking

function ask() {
  wanted += 1;
  showControls();
  if (!busy) work();
}

async function work() {
  busy = true;
  find("answer").setAttribute("aria-busy", "true");
  const slow = setTimeout(() => wait(true), PATIENCE);
  try {
    while (answered < wanted) await askOnce();
  } finally {
    clearTimeout(slow);
    wait(false);
    busy = false;
  }
}

async function askOnce() {
  const number = wanted, of = epoch;
  try {
    const answer = await post("plan", { number, ...asked });
    answered = number;
    if (of !== epoch || answer.number !== number) return;
    view = answer;
    showView();
  } catch (error) {
    answered = number;
    if (of === epoch) showFailure(error);
  }
}

function wait(waiting, text = "", done = null) {
  find("answer").setAttribute("aria-busy", String(waiting));
  const list = asked.order === null ? `planning ${known.desk.orders.length.toLocaleString("en-US")} orders …` : "planning …";
  find("status").textContent = waiting ? text || list : "";
  find("progress").hidden = !waiting;
  if (done === null) find("progress").removeAttribute("value");
  else find("progress").value = done;
}

function showFailure(error) {
  if (!(error instanceof Failure)) throw error;
  find("answer").hidden = false;
  find("answer").classList.add("old");
  draw.drawTrouble(find("trouble"), error.data);
  writeAddress();
}

// ---- the frontier: worked out when settings rest; it does not depend on the urgency

function frontierKey() {
  const { urgency: _, ...rest } = asked.values;
  return JSON.stringify([epoch, asked.order, rest]);
}

let resting = null;

function rest() {
  clearTimeout(resting);
  resting = setTimeout(askFrontier, asked.order === null ? LIST_REST : REST);
}

function followFrontier() {
  if (frontier?.key === frontierKey()) return drawFrontier();
  document.querySelector("[data-chart=frontier]").classList.add("stale");
  if (frontier) drawFrontier();
  rest();
}

async function askFrontier() {
  if (busy) {
    rest();
    return;
  }
  const key = frontierKey();
  try {
    const found = asked.order === null ? await listFrontier(key) : await post("frontier", asked);
    if (found && key === frontierKey()) {
      frontier = { key, ...found };
      drawFrontier();
    }
  } catch (error) {
    if (!(error instanceof Failure)) throw error;
    if (key === frontierKey()) draw.leaveOut(chartBox("frontier"), error.message);
  } finally {
    if (!busy) wait(false);
  }
}

// Point by point, so that a move of a slider is not kept waiting.
async function listFrontier(key) {
  const points = [];
  for (const urgency of LIST_URGENCIES) {
    if (busy) {
      rest();
      return null;
    }
    wait(true, `frontier, point ${points.length + 1} of ${LIST_URGENCIES.length}`, points.length / LIST_URGENCIES.length);
    const answer = await post("frontier", { ...asked, urgencies: [urgency] });
    if (key !== frontierKey()) return null;
    if (!answer.points.length) return { values: null, missing: answer.missing };
    points.push(...answer.points);
  }
  const labelled = points.filter((p) => LIST_LABELLED.includes(p.urgency));
  return {
    missing: "",
    values: {
      frontier_risk: points.map((p) => p.cost_std),
      frontier_cost: points.map((p) => p.expected_cost),
      frontier_urgency: points.map((p) => p.urgency),
      urgency_risk: labelled.map((p) => p.cost_std),
      urgency_cost: labelled.map((p) => p.expected_cost),
      urgency_text: labelled.map((p) => `U = ${p.urgency}`),
      urgency_side: labelled.map((p) => (p.urgency < 0.5 ? "bottom left" : "middle right")),
    },
  };
}

function drawFrontier() {
  const box = chartBox("frontier");
  document.querySelector("[data-chart=frontier]").classList.toggle("stale", frontier.key !== frontierKey());
  if (!frontier.values) return draw.leaveOut(box, frontier.missing);
  const values = draw.frontierValues(frontier.values, view.cases, pin?.view);
  draw.drawChart(box, known.charts[view.kind].frontier, values);
}

// ---- showing

const chartBox = (name) => document.querySelector(`[data-chart=${name}] .chart`);

function showControls() {
  if (!view) return;
  for (const [name, control] of controls) control.show(asked.values[name], view.now[name], view.moments);
  find("as-given").disabled = !Object.keys(asked.values).length;
}

function showView() {
  find("answer").hidden = false;
  find("answer").classList.remove("old");
  draw.drawTrouble(find("trouble"), null);
  find("headline").textContent = `${view.words.join(" · ")}`;
  const pinned = pin?.view;
  const values = {
    ...view.values,
    has_pin: Boolean(pinned),
    pin_left: pinned?.values.left ?? [],
    pin_x: pinned?.values.path_x ?? [],
    pin_time: pinned?.values.path_time ?? [],
  };
  showHeadings();
  const charts = known.charts[view.kind];
  for (const name of ["slices", "left"]) {
    draw.drawChart(chartBox(name), charts[name], values);
  }
  draw.drawCompared(find("compared"), view, pinned);
  find("differences").replaceChildren(...draw.differences(view, pinned).map(item));
  const price = view.now.urgency === null ? "" : ` At this point 1 bp less risk costs ${Number(view.now.urgency.toPrecision(3))} bp.`;
  find("certainty").textContent = view.certainty ? `Optimum: ${view.certainty}.${price}` : price.trim();
  find("certainty").title = view.certificate.join("\n");
  clearTimeout(below);
  below = setTimeout(showBelow, REST); // out of sight; not worth a wait
  for (const id of ["save", "write", "pin"]) find(id).disabled = false;
  showControls();
  followFrontier();
  document.body.dataset.shown = view.number;
}

function showBelow() {
  find("notes").replaceChildren(...view.notes.map(item));
  find("notes-title").textContent = `Notes (${view.notes.length})`;
  find("slices-title").textContent = view.kind === "order" ? "Slices" : `The ${view.orders.length} dearest orders`;
  if (view.kind === "order") draw.drawSlices(find("slices"), view);
  else draw.drawOrders(find("slices"), view, choose);
  writeAddress();
}

// What changes with the kind of what is shown only: headings and legends.
function showHeadings() {
  if (shownKind === view.kind) return;
  shownKind = view.kind;
  for (const [name, chart] of Object.entries(known.charts[view.kind])) {
    const figure = document.querySelector(`[data-chart=${name}]`);
    figure.querySelector("h2").textContent = chart.question;
    figure.querySelector("h2").title = chart.reading;
    draw.drawLegend(figure.querySelector(".legend"), chart.legend);
  }
}

function item(text) {
  const made = document.createElement("li");
  made.textContent = text;
  return made;
}

function showDesk() {
  const { desk } = known;
  const count = desk.orders.length;
  find("source").textContent = `${desk.title}: ${count.toLocaleString("en-US")} order${count === 1 ? "" : "s"} · session ${desk.session} · as of ${desk.at}`;
  find("source").title = Object.entries(desk.files).map(([name, file]) => `${name}: ${file}`).join("\n");
  const whole = new Option(`all ${count.toLocaleString("en-US")} orders${desk.together ? ", as one list" : ", each alone"}`, `=${ALL}`);
  const others = desk.orders.map(({ order, side, quantity, symbol }) =>
    new Option(`${order}: ${side} ${quantity.toLocaleString("en-US")} ${symbol}${desk.together ? ", alone" : ""}`, order));
  find("order").replaceChildren(whole, ...others);
  find("write").hidden = !known.out;
  find("write").textContent = `Write to ${known.out}`;
}

// ---- what can be done

function move(name, value) {
  const values = { ...asked.values };
  if (value === null) delete values[name];
  else values[name] = value;
  asked = { ...asked, values };
  ask();
}

function choose(order, values = {}, pinnedValues = null) {
  epoch += 1;
  frontier = undefined;
  asked = { order, values };
  find("order").value = order ?? `=${ALL}`;
  setPin(null);
  if (pinnedValues) restorePin(pinnedValues);
  ask();
}

function setPin(next) {
  pin = next;
  document.body.classList.toggle("has-pin", Boolean(pin));
  for (const id of ["back", "unpin"]) find(id).hidden = !pin;
}

async function restorePin(values) {
  const of = epoch;
  try {
    const answer = await post("plan", { order: asked.order, values });
    if (of !== epoch) return;
    setPin({ values, view: answer });
    if (view && !busy) showView();
  } catch (error) {
    if (of === epoch) showFailure(error);
  }
}

function turnTo(next, from = {}) {
  known = next;
  showDesk();
  find("tables").close();
  draw.drawTrouble(find("upload-trouble"), null);
  const orders = known.desk.orders.map(({ order }) => order);
  const first = known.desk.together || !orders.length ? null : orders[0];
  const there = from.hasOrder && (from.order === null || orders.includes(from.order));
  choose(there ? from.order : first, from.values ?? {}, from.pin ?? null);
}

async function openTables(mark, from) {
  try {
    turnTo(await post("open", { mark }), from);
  } catch (error) {
    offerTables(error);
  }
}

function offerTables(error) {
  if (error && !(error instanceof Failure)) throw error;
  draw.drawTrouble(find("upload-trouble"), error?.data);
  find("given").hidden = !known.given;
  if (!find("tables").open) find("tables").showModal();
}

async function upload(event) {
  event.preventDefault();
  const form = new FormData(find("upload"));
  const size = [...form.values()].reduce((sum, value) => sum + (value.size ?? 0), 0);
  find("use").disabled = true;
  try {
    if (size > known.most_bytes) {
      throw new Failure({ message: `The files hold ${(size / 1e6).toFixed(1)} MB together, more than the ${known.most_bytes / 1e6} MB that this page takes; start the console with the files on its command line.` });
    }
    turnTo(await post("upload", form));
  } catch (error) {
    offerTables(error);
  } finally {
    find("use").disabled = false;
  }
}

async function save() {
  try {
    const blob = await post("save", asked);
    const link = document.createElement("a");
    link.href = URL.createObjectURL(blob);
    link.download = `plan-${known.desk.date}${asked.order === null ? "" : `-${asked.order}`}.zip`;
    link.click();
    URL.revokeObjectURL(link.href);
    find("status").textContent = `saved as ${link.download}`;
  } catch (error) {
    showFailure(error);
  }
}

async function write() {
  try {
    const { written } = await post("write", asked);
    find("status").textContent = `written to ${written}`;
  } catch (error) {
    showFailure(error);
  }
}

const FILE_HINTS = {
  orders: "needed: order_id, symbol, side, quantity …",
  market: "needed: symbol, price, adv, daily_vol …",
  profiles: "volume through the day",
  readings: "imbalance now, by symbol",
  exposures: "with factor_covariance: one list",
  factor_covariance: "with exposures",
  returns: "in place of exposures",
  corridors: "limits on the list's balances",
  settings: "TOML",
};

function listen() {
  for (const name of [...known.tables, "settings"]) {
    const label = Object.assign(document.createElement("label"), { htmlFor: `file-${name}`, textContent: name });
    const input = Object.assign(document.createElement("input"), { type: "file", id: `file-${name}`, name });
    input.accept = name === "settings" ? ".toml" : ".csv,.parquet,.pq";
    const hint = Object.assign(document.createElement("span"), { textContent: FILE_HINTS[name] });
    find("files").append(label, input, hint);
  }
  const on = (id, event, action) => find(id).addEventListener(event, action);
  on("settings", "submit", (event) => event.preventDefault());
  on("order", "change", () => choose(find("order").value === `=${ALL}` ? null : find("order").value));
  on("as-given", "click", () => { asked = { ...asked, values: {} }; ask(); });
  on("pin", "click", () => { setPin({ values: { ...asked.values }, view }); showView(); });
  on("back", "click", () => { asked = { ...asked, values: { ...pin.values } }; ask(); });
  on("unpin", "click", () => { setPin(null); showView(); });
  on("save", "click", save);
  on("write", "click", write);
  on("tables-button", "click", () => offerTables());
  on("close", "click", () => find("tables").close());
  on("upload", "submit", upload);
  on("example", "click", () => openTables(known.example));
  on("given", "click", () => openTables(known.given));
  document.body.insertAdjacentHTML("beforeend", PATTERNS);
  for (const box of document.querySelectorAll(".chart")) {
    followPointer(box, find("tip"));
    new ResizeObserver(() => box.redraw?.()).observe(box);
  }
  window.addEventListener("hashchange", () => {
    const from = readAddress();
    if (from.mark && from.mark !== known.desk?.mark) openTables(from.mark, from);
    else if (known.desk) turnTo(known, from);
  });
}

async function start() {
  known = await post("known", {});
  controls = makeControls(known.laws, move);
  listen();
  const from = readAddress();
  if (from.mark && from.mark !== known.desk?.mark) openTables(from.mark, from);
  else if (known.desk) turnTo(known, from);
  else offerTables();
}

window.addEventListener("DOMContentLoaded", () => start().catch((error) => {
  find("answer").hidden = false;
  draw.drawTrouble(find("trouble"), { message: error.message });
}));
