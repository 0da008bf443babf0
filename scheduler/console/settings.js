// The settings that can be moved: their words, units and scales.

const three = (value) => Number(value.toPrecision(3));

// Position p on a slider <-> a value. `zero`: position 0 is the value 0, the scale begins at 1.
function ratioScale(low, high, steps, zero) {
  const first = zero ? 1 : 0;
  const span = Math.log(high / low);
  return {
    most: steps,
    value: (p) => (zero && p === 0 ? 0 : three(low * Math.exp((span * (p - first)) / (steps - first)))),
    position: (v) => (v <= 0 ? 0 : Math.max(first, first + ((steps - first) * Math.log(v / low)) / span)),
  };
}

function evenScale(low, high, steps) {
  return {
    most: steps,
    value: (p) => three(low + ((high - low) * p) / steps),
    position: (v) => (steps * (v - low)) / (high - low),
  };
}

// `factor`: what is shown over what is sent.
export const SETTINGS = [
  {
    name: "urgency", group: "choices", label: "Urgency U",
    unit: "bp of cost per bp of standard deviation",
    scale: ratioScale(0.001, 10, 161, true), step: "any", least: 0,
  },
  {
    name: "max_participation", group: "choices", label: "Most of the volume",
    unit: "% own ÷ all volume, outside auctions", factor: 100,
    scale: evenScale(0.01, 1, 99), step: "any", least: 0.1,
  },
  { name: "start", group: "choices", label: "Not before", time: true },
  { name: "end", group: "choices", label: "Not after", time: true },
  {
    name: "volume", group: "worlds", label: "Volume of others", unit: "times the table’s adv",
    scale: ratioScale(0.25, 4, 80, false), step: "any", least: 0.01,
  },
  {
    name: "volatility", group: "worlds", label: "Volatility", unit: "times the table’s daily_vol",
    scale: ratioScale(0.25, 4, 80, false), step: "any", least: 0.01,
  },
  {
    name: "reading", group: "worlds", label: "Imbalance now",
    unit: "ι, relaxation volumes; above 0 more buyers",
    scale: evenScale(-1, 1, 80), step: "any", least: -5,
  },
  { name: "impact_law", group: "worlds", label: "Impact law", choices: true },
];

export const NAMES = SETTINGS.map((setting) => setting.name);

function made(tag, properties, ...inside) {
  const element = Object.assign(document.createElement(tag), properties);
  element.append(...inside);
  return element;
}

// One setting on the page. `changed(name, value)`; a value of null is "as given".
class Control {
  constructor(setting, laws, changed) {
    this.setting = setting;
    const { name, label, unit } = setting;
    const reset = made("button", { type: "button", className: "reset", textContent: "\u21ba", title: "as given" });
    reset.setAttribute("aria-label", `${label}: as given by tables and settings`);
    reset.addEventListener("click", () => {
      this.main.focus();
      changed(name, null);
    });
    this.box = made("div", { className: "setting" }, made("label", { htmlFor: name, textContent: label }));
    if (setting.choices) {
      this.main = made("select", { id: name }, ...laws.map((law) => made("option", { value: law, textContent: law })));
      this.main.addEventListener("change", () => changed(name, this.main.value));
      this.box.append(made("span"), reset, this.main);
      return;
    }
    this.main = made("input", { id: name, type: "range", min: 0, max: setting.time ? 1 : setting.scale.most, step: 1 });
    this.main.addEventListener("input", () => changed(name, this.valueAt(Number(this.main.value))));
    this.exact = setting.time
      ? made("output", { id: `${name}-words` })
      : made("input", { id: `${name}-exact`, type: "number", step: setting.step });
    if (!setting.time) {
      this.exact.min = setting.least * (setting.factor ?? 1);
      this.exact.setAttribute("aria-label", `${label}, exactly`);
      this.exact.addEventListener("change", () => {
        const given = Number(this.exact.value) / (setting.factor ?? 1);
        changed(name, this.exact.value === "" ? null : Number(given.toPrecision(12)));
      });
    }
    this.box.append(this.exact, reset, this.main);
    if (unit) {
      this.box.append(made("span", { id: `${name}-unit`, className: "unit", textContent: unit }));
      this.main.setAttribute("aria-describedby", `${name}-unit`);
    }
  }

  valueAt(position) {
    return this.setting.time ? this.moments[position].value : this.setting.scale.value(position);
  }

  // `moved`: the value asked for, or undefined; `now`: the one in force.
  show(moved, now, moments) {
    const value = moved ?? now;
    this.box.classList.toggle("moved", moved !== undefined);
    if (this.setting.choices) this.main.value = value;
    else if (this.setting.time) this.showMoment(value, moments);
    else this.showNumber(value);
  }

  showNumber(value) {
    const { scale, factor } = this.setting;
    const known = value !== null && value !== undefined;
    const shown = known ? String(three(value * (factor ?? 1))) : "";
    if (document.activeElement !== this.exact) this.exact.value = shown;
    this.exact.placeholder = known ? "" : "differ";
    const position = known ? Math.round(scale.position(value)) : Math.round(scale.most / 2);
    this.main.value = String(Math.min(scale.most, Math.max(0, position)));
    this.main.setAttribute("aria-valuetext", `${shown || "differs by order"} ${this.setting.unit}`);
  }

  showMoment(value, moments) {
    this.moments = moments;
    this.main.max = String(moments.length - 1);
    const at = Date.parse(value);
    const after = moments.findIndex((moment) => Date.parse(moment.value) >= at);
    const nearest = after < 0 ? moments.length - 1 : after;
    this.main.value = String(nearest);
    const exact = moments.find((moment) => Date.parse(moment.value) === at);
    const words = exact ? exact.words : value.slice(moments[0].words.length > 5 ? 0 : 11, 16).replace("T", " ");
    this.exact.textContent = words;
    this.main.setAttribute("aria-valuetext", words);
  }
}

export function makeControls(laws, changed) {
  const controls = new Map();
  for (const setting of SETTINGS) {
    const control = new Control(setting, laws, changed);
    document.getElementById(setting.group).append(control.box);
    controls.set(setting.name, control);
  }
  return controls;
}
