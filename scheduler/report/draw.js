"use strict";

const find = (id) => document.getElementById(id);

// base64 of gzip -> text
async function unpacked(id) {
  const bytes = Uint8Array.from(atob(find(id).textContent), (c) => c.charCodeAt(0));
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("gzip"));
  return new Response(stream).text();
}

function runPlotly(code) {
  const script = document.createElement("script");
  script.textContent = code;
  document.head.append(script);
}

// ---- charts: "@name" in a chart's description stands for a value of the order drawn

class Missing extends Error {}

function filled(node, values) {
  if (typeof node === "string" && node[0] === "@") {
    const value = values[node.slice(1)];
    if (value === undefined) throw new Missing(node);
    return Array.isArray(value) ? value.slice() : value;
  }
  if (Array.isArray(node)) return node.map((item) => filled(item, values));
  if (node === null || typeof node !== "object") return node;
  return Object.fromEntries(Object.entries(node).map(([key, item]) => [key, filled(item, values)]));
}

const CONFIG = {
  displayModeBar: false,
  responsive: true,
};

function drawChart(box, chart, values, missing) {
  let traces, layout;
  if (box.data) Plotly.purge(box);
  try {
    if (!values) throw new Missing();
    traces = filled(chart.traces, values);
    layout = filled(chart.layout, values);
  } catch (error) {
    if (!(error instanceof Missing)) throw error;
    const note = document.createElement("p");
    note.textContent = missing;
    box.replaceChildren(note);
    return;
  }
  box.replaceChildren();
  Plotly.newPlot(box, traces, layout, CONFIG); // not react, which loses labels of changed points
}

function cell(tag, text, scope) {
  const made = document.createElement(tag);
  made.textContent = text;
  if (scope) made.scope = scope;
  return made;
}

// ---- charts that come whole, with their questions and readings

function drawAll(place, charts) {
  const figures = charts.map((chart) => {
    const figure = document.createElement("figure");
    const box = cell("div", "");
    box.className = "chart";
    figure.append(cell("h3", chart.question), box, cell("figcaption", chart.reading));
    return figure;
  });
  for (const box of place.querySelectorAll(".chart")) if (box.data) Plotly.purge(box);
  place.replaceChildren(...figures);
  charts.forEach((chart, i) => drawChart(figures[i].querySelector(".chart"), chart, {}, ""));
}

// ---- starting a page

async function readPage() {
  const [data, code] = await Promise.all([unpacked("data"), unpacked("plotly")]);
  runPlotly(code);
  return JSON.parse(data);
}

// A printed chart is as wide as the paper, whatever the window was.
function fitPaper(width, height) {
  const resized = (wide) => {
    for (const box of document.querySelectorAll(".chart")) {
      if (box.data) Plotly.relayout(box, wide ? { width: wide, height } : { width: null, height: null, autosize: true });
    }
  };
  window.addEventListener("beforeprint", () => resized(width));
  window.addEventListener("afterprint", () => resized(null));
}

function run(start) {
  start().then(() => {
    find("trouble").hidden = true;
  }).catch((error) => {
    find("trouble").textContent = `The charts could not be drawn: ${error.message}`;
    throw error;
  });
}
