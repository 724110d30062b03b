// What stands around the plot: the species as switches with their values at the cursor, and the tools.

import { hasTraces, modelAt, notOnLog, quantityOf, scaleOf, timeRange, told, uncertainty } from "./data.js";
import { savePng, saveSvg } from "./files.js";
import { pathOf } from "./marks.js";
import { plain, withUncertainty } from "./numbers.js";

const SVG = "http://www.w3.org/2000/svg";
const HINT = "Point at the plot, or use the arrow keys, for values.";

function make(tag, properties = {}, ...children) {
  const element = Object.assign(document.createElement(tag), properties);
  element.append(...children);
  return element;
}

function button(text, act, pressed) {
  const made = make("button", { type: "button", textContent: text });
  if (pressed !== undefined) made.setAttribute("aria-pressed", String(pressed));
  made.addEventListener("click", () => act(made));
  return made;
}

/** Build the panel of a chart into its figure; `change` does what the reader asks for. */
export function buildPanel(chart, figure, change) {
  const at = make("p", { className: "chart-at" });
  const values = chart.series.map(() => make("span", { className: "chart-value" }));
  const legend = make("ul", { className: "chart-legend" }, ...chart.series.map((series, i) =>
    make("li", { className: series.colour }, speciesButton(series, change), values[i])));
  const plot = make("div", { className: "chart-plot", tabIndex: 0 });
  plot.setAttribute("role", "slider");
  plot.setAttribute("aria-label", `Time in ${chart.data.title}`);
  plot.addEventListener("keydown", (event) => stepByKey(event, chart, change));
  const whole = button("Whole time", () => change.whole());
  const note = make("p", { className: "chart-note" });
  const body = make("div", { className: "chart-body" }, plot, make("div", { className: "chart-side" }, at, legend));
  const tools = make("div", { className: "chart-tools" }, ...toolsOf(chart, figure, change, whole));
  figure.append(body, tools, note);
  chart.parts = { at, values, plot, whole, note, body, tools };
  showChoices(chart);
  return plot;
}

/** Take the panel away again. */
export function removePanel(chart) {
  const { body, tools, note } = chart.parts;
  body.remove();
  tools.remove();
  note.remove();
}

function speciesButton(series, change) {
  const sample = document.createElementNS(SVG, "svg");
  sample.setAttribute("viewBox", series.x.length ? "0 0 14 14" : "0 0 34 14");
  sample.setAttribute("aria-hidden", "true");
  const mark = document.createElementNS(SVG, "path");
  mark.setAttribute("d", series.x.length ? pathOf(series.shape, 7, 7, 4.5) : "M1 7H33");
  mark.setAttribute("class", series.x.length ? "mark" : "curve");
  if (series.dashes.length) mark.setAttribute("stroke-dasharray", series.dashes.join(" "));
  sample.append(mark);
  const made = button("", (self) => self.setAttribute("aria-pressed", String(change.toggle(series))), series.shown);
  made.className = "chart-species";
  made.append(sample, make("span", { className: "chart-name", textContent: series.name }));
  return made;
}

function toolsOf(chart, figure, change, whole) {
  const flip = (name) => (self) => self.setAttribute("aria-pressed", String(change.flip(name)));
  const tools = [button("Log time", flip("logTime"), chart.logTime)];
  if (!chart.residuals) tools.push(button(`Log ${quantityOf(chart)}`, flip("logValue"), chart.logValue));
  if (hasTraces(chart)) tools.push(button("Trace species on own axis", flip("apart"), chart.apart));
  tools.push(button("Zoom in", () => change.closer()), whole);
  tools.push(button("Save SVG", () => saveSvg(chart)), button("Save PNG", () => savePng(chart)));
  if (figure.dataset.csv) tools.push(make("a", { href: figure.dataset.csv, textContent: "CSV", download: "" }));
  return tools;
}

function stepByKey(event, chart, change) {
  const xs = chart.plot.data[0];
  const [first, last] = timeRange(chart);
  const inView = xs.filter((t) => t >= first && t <= last);
  const next = {
    ArrowRight: () => inView.find((t) => chart.time === null || t > chart.time),
    ArrowLeft: () => inView.findLast((t) => chart.time === null || t < chart.time),
    Home: () => inView[0],
    End: () => inView.at(-1),
  }[event.key];
  if (event.key === "Escape") change.whole();
  else if (next === undefined) return;
  else if (next() !== undefined) change.point(next());
  event.preventDefault();
}

/** Write the values at the cursor. */
export function showValues(chart) {
  const { idx, idxs, left } = chart.plot.cursor;
  const { at, values } = chart.parts;
  const nothing = idx === null || idx === undefined || left < 0;
  chart.time = nothing ? chart.time : chart.plot.data[0][idx];
  at.textContent = nothing ? HINT : atTime(chart, chart.time);
  const texts = chart.series.map((series, i) => (nothing || !series.shown ? "" : valueText(chart, series, i, idxs[i + 1])));
  texts.forEach((text, i) => { values[i].textContent = text; });
  if (!nothing) announce(chart, texts);
}

function atTime(chart, time) {
  const { time_unit: timeUnit, value_unit: unit } = chart.data;
  return `at ${plain(time)} ${timeUnit}${unit ? `, in ${unit}` : ""}`;
}

function valueText(chart, series, i, idx) {
  if (idx === null || idx === undefined) return "no value";
  const row = chart.rows[i][idx];
  const { x, y, measured } = told(series);
  const spread = measured && !chart.residuals ? uncertainty(series, row) : null;
  const own = x[row] === chart.time ? "" : ` at ${plain(x[row])}`;
  const out = measured && series.leftOut.has(row) ? ", left out" : "";
  const model = measured ? modelAt(series, x[row]) : null;
  return `${withUncertainty(y[row], spread)}${own}${out}${model === null ? "" : `; model ${plain(model)}`}`;
}

function announce(chart, texts) {
  const { plot } = chart.parts;
  const [first, last] = timeRange(chart);
  plot.setAttribute("aria-valuemin", first);
  plot.setAttribute("aria-valuemax", last);
  plot.setAttribute("aria-valuenow", chart.time);
  const spoken = chart.series.filter((s) => s.shown).map((s) => `${s.name} ${texts[chart.series.indexOf(s)]}`);
  plot.setAttribute("aria-valuetext", `${atTime(chart, chart.time)}: ${spoken.join(", ")}`);
}

/** Show what has been chosen: whether there is a zoom to undo, which axes are used, what is not drawn. */
export function showChoices(chart) {
  const { whole, note, plot, at } = chart.parts;
  whole.disabled = chart.zoom === null;
  note.textContent = notesOf(chart).join(" ");
  if (at.textContent === "") at.textContent = HINT;
  if (!plot.hasAttribute("aria-valuenow")) {
    const [first, last] = timeRange(chart);
    plot.setAttribute("aria-valuemin", first);
    plot.setAttribute("aria-valuemax", last);
    plot.setAttribute("aria-valuenow", first);
    plot.setAttribute("aria-valuetext", HINT);
  }
}

const counted = (n) => (n === 1 ? "1 point" : `${n} points`);

function notesOf(chart) {
  const notes = [];
  const shown = chart.series.filter((s) => s.shown);
  if (chart.residuals) notes.push(`Dashed: ±${chart.band}, which one in twenty passes by chance.`);
  if (shown.some((s) => s.u !== null)) notes.push("Bars of one standard uncertainty, where longer than the marker.");
  if (shown.some((s) => s.model)) notes.push(`Lines: ${chart.data.model_name || "model"}.`);
  if (shown.some((s) => s.leftOut.size)) notes.push("Hollow grey: left out of the fit.");
  if (shown.some((s) => scaleOf(chart, s) === "own")) {
    notes.push(`On the right axis: ${shown.filter((s) => scaleOf(chart, s) === "own").map((s) => s.name).join(", ")}.`);
  }
  const { times, values } = notOnLog(chart);
  if (times) notes.push(`Not on the log axis: ${counted(times)} at time 0 or before.`);
  if (values) notes.push(`Not on the log axis: ${counted(values)} at 0 or below.`);
  if (chart.data.thinned) notes.push("Not all points are drawn; the CSV has them all.");
  return notes;
}
