// Draws the charts' descriptions as SVG: the part of them that the console uses, in a few
// milliseconds, so that a chart can follow a slider.

const ESCAPES = { "&": "&amp;", "<": "&lt;", ">": "&gt;", '"': "&quot;" };
const safe = (text) => String(text).replace(/[&<>"]/g, (sign) => ESCAPES[sign]);
const short = (number) => Math.round(number * 10) / 10;

// ---- axes

const COUNT = 6; // about so many ticks

function niceTicks(low, high) {
  const rough = (high - low) / COUNT || 1;
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = [1, 2, 5, 10].find((times) => times * power >= rough * 0.999) * power;
  const ticks = [];
  for (let i = Math.ceil(low / step - 1e-9); i * step <= high + 1e-9 * step; i += 1) ticks.push(i * step);
  return { ticks, step };
}

function tickText(value, step) {
  const [scale, unit] = step >= 1e6 ? [1e6, "M"] : step >= 1e3 ? [1e3, "k"] : [1, ""];
  const digits = Math.min(6, Math.max(0, Math.ceil(-Math.log10(step / scale) - 1e-9)));
  return (value === 0 ? "0" : (value / scale).toFixed(digits) + unit).replace("-", "\u2212");
}

function dataRange(traces, toZero) {
  let low = Infinity, high = -Infinity;
  for (const trace of traces) {
    if (trace.type === "bar" || toZero) low = Math.min(low, 0), high = Math.max(high, 0);
    for (const value of trace.y) {
      if (value === null || value === undefined) continue;
      low = Math.min(low, value);
      high = Math.max(high, value);
    }
  }
  if (!(low <= high)) return [0, 1];
  const margin = 0.05 * (high - low) || 1;
  return [toZero && low === 0 ? 0 : low - margin, high + margin];
}

const linear = ([low, high], from, to) => (value) => from + ((value - low) / (high - low || 1)) * (to - from);

function label(x, y, text, more = "") {
  const lines = String(text).split("<br>").map((line, i) => `<tspan x="${short(x)}" dy="${i ? 14 : 0}">${safe(line)}</tspan>`);
  return `<text x="${short(x)}" y="${short(y)}" ${more}>${lines.join("")}</text>`;
}

function xAxis(axis, x, plot) {
  const chosen = axis.tickvals;
  const { ticks, step } = chosen ? { ticks: chosen } : niceTicks(...axis.range);
  const marks = ticks.map((value, i) => {
    const at = short(x(value));
    const grid = axis.showgrid === false ? "" : `<path class="grid" d="M${at} ${plot.top}V${plot.bottom}"/>`;
    const text = chosen ? axis.ticktext[i] : tickText(value, step);
    return `${grid}<path class="axis" d="M${at} ${plot.bottom}v5"/>${label(at, plot.bottom + 17, text, 'text-anchor="middle"')}`;
  });
  const title = label((plot.left + plot.right) / 2, plot.height - 4, axis.title.text, 'text-anchor="middle"');
  return `${marks.join("")}<path class="axis" d="M${plot.left} ${plot.bottom}H${plot.right}"/>${title}`;
}

function yAxis(axis, y, plot, right) {
  const { ticks, step } = niceTicks(...axis.range);
  const edge = right ? plot.right : plot.left;
  const way = right ? 1 : -1;
  const marks = ticks.map((value) => {
    const at = short(y(value));
    const grid = axis.showgrid === false ? "" : `<path class="${axis.zeroline && value === 0 ? "axis" : "grid"}" d="M${plot.left} ${at}H${plot.right}"/>`;
    return `${grid}<path class="axis" d="M${edge} ${at}h${5 * way}"/>${label(edge + 8 * way, at + 4, tickText(value, step), `text-anchor="${right ? "start" : "end"}"`)}`;
  });
  const [tx, ty] = [right ? plot.width - 6 : 13, (plot.top + plot.bottom) / 2];
  const title = label(tx, ty, axis.title.text, `text-anchor="middle" transform="rotate(-90 ${tx} ${ty})"`);
  return `${marks.join("")}<path class="axis" d="M${edge} ${plot.top}V${plot.bottom}"/>${title}`;
}

// ---- traces

const at = (value, i) => (Array.isArray(value) ? value[i] : value);
const drawn = (trace, i) => Number.isFinite(trace.x[i]) && Number.isFinite(trace.y[i]) && trace.x[i] !== null && trace.y[i] !== null;

const HATCHES = { "/": "lines", ".": "dots", x: "crosses" };

export const PATTERNS = `<svg width="0" height="0" aria-hidden="true"><defs>
<pattern id="lines" width="5" height="5" patternUnits="userSpaceOnUse"><path fill="white" d="M0 0h5v5h-5z"/><path class="hatch" d="M-1 1l2 -2M0 5l5 -5M4 6l2 -2"/></pattern>
<pattern id="dots" width="5" height="5" patternUnits="userSpaceOnUse"><path fill="white" d="M0 0h5v5h-5z"/><circle class="dot" cx="2.5" cy="2.5" r="1.3"/></pattern>
<pattern id="crosses" width="6" height="6" patternUnits="userSpaceOnUse"><path fill="white" d="M0 0h6v6h-6z"/><path class="hatch thin" d="M0 6l6 -6M0 0l6 6"/></pattern>
</defs></svg>`;

function bars(trace, x, y) {
  const { color, line, pattern } = trace.marker;
  return trace.x.map((centre, i) => {
    if (!drawn(trace, i)) return "";
    const half = trace.width[i] / 2;
    const [left, right] = [x(centre - half), x(centre + half)];
    const [top, bottom] = [y(Math.max(0, trace.y[i])), y(Math.min(0, trace.y[i]))];
    const hatch = HATCHES[at(pattern?.shape, i)];
    const fill = hatch ? `url(#${hatch})` : color === "rgba(0,0,0,0)" ? "none" : color;
    return `<rect x="${short(left)}" y="${short(top)}" width="${short(right - left)}" height="${short(bottom - top)}" fill="${fill}" stroke="${line.color}" stroke-width="${line.width}"/>`;
  }).join("");
}

function path(trace, x, y) {
  let pen = "M";
  const steps = trace.x.map((_, i) => {
    if (!drawn(trace, i)) {
      pen = "M";
      return "";
    }
    const step = `${pen}${short(x(trace.x[i]))} ${short(y(trace.y[i]))}`;
    pen = "L";
    return step;
  });
  const { color, width, dash } = trace.line;
  const dashes = dash === "solid" ? "" : ` stroke-dasharray="${dash.replaceAll("px", "")}"`;
  return `<path fill="none" stroke="${color}" stroke-width="${width}" stroke-linejoin="round"${dashes} d="${steps.join("")}"/>`;
}

function star(r) {
  const points = Array.from({ length: 10 }, (_, i) => {
    const [radius, angle] = [i % 2 ? 0.42 * r : r, (Math.PI * i) / 5];
    return `${short(radius * Math.sin(angle))} ${short(-radius * Math.cos(angle))}`;
  });
  return `M${points.join("L")}Z`;
}

const SYMBOLS = {
  circle: (r) => `M${-r} 0a${r} ${r} 0 1 0 ${2 * r} 0a${r} ${r} 0 1 0 ${-2 * r} 0Z`,
  square: (r) => `M${-r} ${-r}h${2 * r}v${2 * r}h${-2 * r}Z`,
  diamond: (r) => `M0 ${-1.3 * r}L${1.3 * r} 0L0 ${1.3 * r}L${-1.3 * r} 0Z`,
  "triangle-down": (r) => `M${-r} ${-0.7 * r}H${r}L0 ${r}Z`,
  "line-ew": (r) => `M${-1.4 * r} 0h${2.8 * r}`,
  star,
};

function markers(trace, x, y) {
  const { symbol = "circle", size, color = "none", line = { color: "none", width: 0 } } = trace.marker;
  const shape = SYMBOLS[symbol](size / 2);
  return trace.x.map((value, i) => (drawn(trace, i)
    ? `<path transform="translate(${short(x(value))} ${short(y(trace.y[i]))})" d="${shape}" fill="${color}" stroke="${line.color}" stroke-width="${line.width}"/>`
    : "")).join("");
}

const SIDES = { "middle right": [9, 4, "start"], "bottom left": [-6, 17, "end"] };

function texts(trace, x, y) {
  return trace.x.map((value, i) => {
    const [dx, dy, anchor] = SIDES[at(trace.textposition, i)];
    return label(x(value) + dx, y(trace.y[i]) + dy, trace.text[i], `class="note" text-anchor="${anchor}"`);
  }).join("");
}

function one(trace, x, y) {
  if (trace.type === "bar") return bars(trace, x, y);
  if (trace.mode === "text") return texts(trace, x, y);
  const parts = [];
  if (trace.mode?.includes("lines")) parts.push(path(trace, x, y));
  if (trace.mode?.includes("markers")) parts.push(markers(trace, x, y));
  return parts.join("");
}

// ---- the whole

export function drawSvg(box, traces, layout, title) {
  const { l, r, t } = layout.margin;
  const dated = layout.xaxis.ticktext?.some((text) => text.includes("<br>"));
  const b = layout.margin.b + (dated ? 14 : 0);
  const [width, height] = [box.clientWidth, box.clientHeight];
  const plot = { left: l, right: width - r, top: t, bottom: height - b, width, height };
  const shown = traces.filter((trace) => trace.visible !== false);
  const yaxis = { ...layout.yaxis };
  yaxis.range ??= dataRange(shown, yaxis.rangemode === "tozero");
  const x = linear(layout.xaxis.range, plot.left, plot.right);
  const y = linear(yaxis.range, plot.bottom, plot.top);
  const pauses = (layout.shapes ?? []).map(({ x0, x1, fillcolor }) =>
    `<rect x="${short(x(x0))}" y="${t}" width="${short(x(x1) - x(x0))}" height="${plot.bottom - t}" fill="${fillcolor}"/>`);
  const second = layout.yaxis2 ? yAxis(layout.yaxis2, linear(layout.yaxis2.range, plot.bottom, plot.top), plot, true) : "";
  box.innerHTML = `<svg width="${width}" height="${height}" role="img" aria-label="${safe(title)}">${pauses.join("")}${
    xAxis(layout.xaxis, x, plot)}${yAxis(yaxis, y, plot, false)}${second}${
    shown.map((trace) => one(trace, x, y)).join("")}</svg>`;
  box.points = { traces: shown, x, y };
}

// ---- what is under the pointer

const FORMATS = {};

function formatted(value, format) {
  const found = /^(,?)(?:\.(\d+)([fg]))?$/.exec(format ?? "");
  if (!found || typeof value !== "number") return String(value ?? "");
  const [, comma, digits, kind] = found;
  if (kind === "g") return String(Number(value.toPrecision(Number(digits)))).replace("-", "\u2212");
  FORMATS[format] ??= new Intl.NumberFormat("en-US", {
    useGrouping: comma === ",",
    ...(kind === "f" ? { minimumFractionDigits: Number(digits), maximumFractionDigits: Number(digits) } : { maximumFractionDigits: 9 }),
  });
  return FORMATS[format].format(value).replace("-", "\u2212");
}

function words(trace, i) {
  const values = { x: trace.x[i], y: trace.y[i], text: at(trace.text, i), customdata: at(trace.customdata, i), "fullData.name": trace.name };
  const text = trace.hovertemplate.replace(/%\{([^}:]+)(?::([^}]*))?\}/g, (_, name, format) =>
    (format === undefined ? String(values[name] ?? "") : formatted(values[name], format)));
  return text.replace("<extra>", "<br>").replace("</extra>", "").split("<br>").filter(Boolean);
}

function nearest(box, px, py) {
  const { traces, x, y } = box.points;
  let best = null, least = 40;
  for (const trace of traces) {
    if (!trace.hovertemplate) continue;
    for (let i = 0; i < trace.x.length; i += 1) {
      if (!drawn(trace, i)) continue;
      const dx = x(trace.x[i]) - px, dy = y(trace.y[i]) - py;
      const inside = trace.type === "bar" && Math.abs(dx) <= (x(trace.width[i]) - x(0)) / 2;
      const away = inside ? Math.min(Math.abs(dy), 12) : Math.hypot(dx, dy);
      if (away <= least) [best, least] = [{ trace, i }, away];
    }
  }
  return best;
}

export function followPointer(box, tip) {
  box.addEventListener("pointermove", (event) => {
    if (!box.points) return;
    const frame = box.getBoundingClientRect();
    const found = nearest(box, event.clientX - frame.left, event.clientY - frame.top);
    tip.hidden = !found;
    if (!found) return;
    tip.replaceChildren(...words(found.trace, found.i).map((line) => Object.assign(document.createElement("div"), { textContent: line })));
    const left = event.clientX + 14 + tip.offsetWidth > window.innerWidth ? event.clientX - 14 - tip.offsetWidth : event.clientX + 14;
    tip.style.left = `${left}px`;
    tip.style.top = `${Math.max(4, event.clientY - 12 - tip.offsetHeight)}px`;
  });
  box.addEventListener("pointerleave", () => { tip.hidden = true; });
}
