// ---- the slices of an order

const shareText = new Intl.NumberFormat("en-US", { maximumFractionDigits: 6 });
const fixed = (digits) => new Intl.NumberFormat("en-US", {
  minimumFractionDigits: digits, maximumFractionDigits: digits, signDisplay: "negative",
});
const [whole, one, two, four] = [0, 1, 2, 4].map(fixed);
const written = (format, value) => format.format(value).replace("-", "\u2212");

const SLICE_COLUMNS = [
  ["bucket", (v, i) => v.bucket[i]],
  ["expected volume", (v, i) => written(whole, v.volume[i])],
  ["shares", (v, i) => shareText.format(v.shares[i])],
  ["left", (v, i) => shareText.format(v.remaining[i])],
  ["of the volume, %", (v, i) => written(one, 100 * v.shares[i] / ((v.shares[i] + v.volume[i]) || 1))],
  ["imbalance Z/L", (v, i) => written(four, v.imbalance_end[i])],
  ["price moved, bps", (v, i) => written(two, v.moved_end[i])],
  ["expected cost", (v, i) => written(whole, v.slice_cost[i])],
  ["risk still ahead", (v, i) => written(whole, v.std_ahead[i])],
];

function drawSlices(values) {
  const head = document.createElement("thead");
  head.insertRow().append(...SLICE_COLUMNS.map(([name]) => cell("th", name, "col")));
  const body = document.createElement("tbody");
  values.shares.forEach((_, i) => {
    body.insertRow().append(...SLICE_COLUMNS.map(([, text], column) =>
      column ? cell("td", text(values, i)) : cell("th", text(values, i), "row")));
  });
  find("slices").replaceChildren(head, body);
}

// ---- picking and sorting

function show(data, place) {
  const order = data.orders[place];
  const values = { ...data.axes[order.axis], ...order.values };
  find("title").textContent = order.title;
  find("tiles").innerHTML = order.tiles; // escaped where the page was made
  find("cards").innerHTML = order.cards;
  find("picker").value = String(place);
  const missing = order.lawsDrawn
    ? data.certain
    : `Worked out for the ${data.lawsDrawn} ${data.list ? "dearest" : "largest"} orders only.`;
  for (const box of document.querySelectorAll("[data-chart]")) {
    const name = box.dataset.chart;
    drawChart(box, data.charts[name], values, order.missing[name] ?? missing);
  }
  drawSlices(values);
  for (const row of rows) {
    if (row.dataset.order === String(place)) row.setAttribute("aria-current", "true");
    else row.removeAttribute("aria-current");
  }
}

function drawList(list, certain) {
  for (const box of document.querySelectorAll("[data-list]")) {
    const chart = list.charts[box.dataset.list];
    drawChart(box, chart, chart.values && { ...list.axis, ...chart.values }, certain);
  }
}

// All rows in the order in which they are sorted; the table holds those that are chosen.
let rows = [];

function choose() {
  const kind = document.querySelector("[name=caps]:checked").value;
  const words = find("find").value.trim().toLowerCase();
  const named = (row) => [0, 1].some((i) => row.cells[i].textContent.toLowerCase().includes(words));
  const chosen = rows.filter((row) => (!kind || row.matches(kind)) && named(row));
  document.querySelector(".orders tbody").replaceChildren(...chosen);
  find("count").textContent = `${whole.format(chosen.length)} of ${whole.format(rows.length)} orders`;
}

function sortBy(heading) {
  const column = [...heading.parentNode.children].indexOf(heading);
  const numeric = heading.classList.contains("figure");
  // Figures begin with the largest.
  const first = numeric ? "descending" : "ascending";
  const other = numeric ? "ascending" : "descending";
  const how = heading.getAttribute("aria-sort") === first ? other : first;
  for (const each of heading.parentNode.children) each.setAttribute("aria-sort", "none");
  heading.setAttribute("aria-sort", how);
  const keyed = rows.map((row) => {
    const at = row.cells[column];
    return [numeric ? Number(at.dataset.value || NaN) : at.textContent, row];
  });
  const sign = how === "ascending" ? 1 : -1;
  const compare = numeric
    ? (a, b) => (isNaN(a) - isNaN(b)) || sign * (a - b) || 0
    : (a, b) => sign * a.localeCompare(b, "en", { numeric: true });
  rows = keyed.sort((a, b) => compare(a[0], b[0])).map(([, row]) => row);
  choose();
}

function listen(data) {
  rows = [...document.querySelectorAll(".orders tbody tr")];
  if (rows.length) choose();
  document.querySelector(".filter").addEventListener("change", choose);
  find("find").addEventListener("input", choose);
  find("picker").addEventListener("change", (event) => show(data, Number(event.target.value)));
  document.querySelector(".orders").addEventListener("click", (event) => {
    const button = event.target.closest("button");
    if (!button) return;
    if (button.classList.contains("pick")) {
      show(data, Number(button.closest("tr").dataset.order));
      find("order").scrollIntoView();
    } else sortBy(button.closest("th"));
  });
  fitPaper(690, 250);
}

async function start() {
  const report = await readPage();
  listen(report);
  if (report.list) drawList(report.list, report.certain);
  show(report, report.first); // all its charts at first sight
}

run(start);
