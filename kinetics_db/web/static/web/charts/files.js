// A chart as a file: SVG written from the numbers, PNG from the canvas.

import { hasTraces, scaleOf, timeLabel, timeRange, uncertainty, valueLabel, valueRange } from "./data.js";
import { addTo, pathOf } from "./marks.js";
import { linearTicks, logTicks, plain, withUncertainty } from "./numbers.js";
import { RADIUS, palette, rowsInView } from "./paint.js";

const SVG = "http://www.w3.org/2000/svg";
const [WIDTH, HEIGHT, TOP, BOTTOM, LEFT] = [760, 420, 44, 366, 78];
const KEY = 180; // width of the key beside the plot
const FAMILY = "system-ui, 'Segoe UI', 'Liberation Sans', sans-serif";

function download(blob, name) {
  const link = document.createElement("a");
  link.href = URL.createObjectURL(blob);
  link.download = name;
  link.click();
  setTimeout(() => URL.revokeObjectURL(link.href), 10_000);
}

export function saveSvg(chart) {
  const text = `<?xml version="1.0" encoding="UTF-8"?>\n${new XMLSerializer().serializeToString(svgOf(chart))}\n`;
  download(new Blob([text], { type: "image/svg+xml" }), `${chart.data.name}.svg`);
}

export function savePng(chart) {
  pngOf(chart).toBlob((blob) => download(blob, `${chart.data.name}.png`), "image/png");
}

function add(parent, tag, attributes = {}, text = null) {
  const element = document.createElementNS(SVG, tag);
  for (const [name, value] of Object.entries(attributes)) element.setAttribute(name, value);
  // Control characters may stand in names from old files, and not in a document.
  if (text !== null) element.textContent = text.replace(/\p{Cc}/gu, " ");
  parent.append(element);
  return element;
}

const short = (value) => value.toFixed(2);

/** A scale of the drawing: where a value stands, and its ticks. */
function scaleFrom(range, [start, end], log, about) {
  const [low, high] = log ? range.map(Math.log10) : range;
  const place = (value) => start + (((log ? Math.log10(value) : value) - low) / (high - low)) * (end - start);
  return { place, low: range[0], ...(log ? logTicks(range) : linearTicks(range, about)) };
}

/** The chart as an <svg> element, one group for each point. */
export function svgOf(chart) {
  const colours = palette();
  const own = chart.apart && hasTraces(chart);
  const right = WIDTH - KEY - (own ? 64 : 0);
  const svg = document.createElementNS(SVG, "svg");
  for (const [name, value] of Object.entries({ viewBox: `0 0 ${WIDTH} ${HEIGHT}`, width: WIDTH, height: HEIGHT })) {
    svg.setAttribute(name, value);
  }
  add(svg, "title", {}, chart.data.title);
  add(svg, "rect", { width: WIDTH, height: HEIGHT, fill: colours.leaf });
  const area = add(add(svg, "defs"), "clipPath", { id: "area" });
  add(area, "rect", { x: LEFT - 5, y: TOP - 5, width: right - LEFT + 10, height: BOTTOM - TOP + 10 });
  const x = scaleFrom(timeRange(chart), [LEFT, right], chart.logTime, 7);
  const scales = { y: scaleFrom(valueRange(chart, "y"), [BOTTOM, TOP], chart.logValue, 6) };
  if (own) scales.own = scaleFrom(valueRange(chart, "own"), [BOTTOM, TOP], chart.logValue, 6);
  const frame = add(svg, "g", { class: "axes", "font-family": FAMILY, "font-size": 12, fill: colours.ink });
  add(frame, "text", { x: LEFT, y: 24, "font-size": 15, "font-weight": 600 }, chart.data.title);
  drawAxes(frame, chart, x, scales, right);
  const inside = add(svg, "g", { class: "area", "clip-path": "url(#area)" });
  const shown = chart.series.filter((series) => series.shown);
  for (const series of shown) drawCurve(inside, chart, series, x, scales[scaleOf(chart, series)]);
  for (const series of shown) drawPoints(inside, chart, series, x, scales[scaleOf(chart, series)]);
  drawKey(svg, shown, own ? right + 84 : right + 22);
  return svg;
}

function drawAxes(frame, chart, x, scales, right) {
  const { faint, grid } = palette();
  const lines = scales.y.ticks.map((t) => `M${LEFT} ${short(scales.y.place(t))}H${right}`).join("");
  add(frame, "path", { d: lines, stroke: grid, fill: "none" });
  const marks = x.ticks.map((t) => `M${short(x.place(t))} ${BOTTOM}v5`).join("");
  add(frame, "path", { d: `M${LEFT} ${TOP}V${BOTTOM}H${right}${scales.own ? `V${TOP}` : ""}${marks}`, stroke: faint, fill: "none" });
  x.ticks.forEach((t, i) => {
    add(frame, "text", { x: short(x.place(t)), y: BOTTOM + 19, "text-anchor": "middle" }, x.labels[i]);
  });
  add(frame, "text", { x: (LEFT + right) / 2, y: HEIGHT - 12, "text-anchor": "middle" }, timeLabel(chart));
  for (const [key, scale] of Object.entries(scales)) {
    const [at, anchor, middle] = key === "y" ? [LEFT - 8, "end", 18] : [right + 8, "start", right + 62];
    scale.ticks.forEach((t, i) => {
      add(frame, "text", { x: at, y: short(scale.place(t) + 4), "text-anchor": anchor }, scale.labels[i]);
    });
    const half = (TOP + BOTTOM) / 2;
    const label = key === "y" ? valueLabel(chart) : `${valueLabel(chart)}, traces`;
    add(frame, "text", { x: middle, y: half, "text-anchor": "middle", transform: `rotate(-90 ${middle} ${half})` }, label);
  }
  if (!chart.residuals) return;
  for (const value of [0, chart.band, -chart.band]) {
    const y = short(scales.y.place(value));
    add(frame, "path", { d: `M${LEFT} ${y}H${right}`, stroke: faint, "stroke-dasharray": value ? "6 4" : "none" });
  }
}

function drawCurve(parent, chart, series, x, scale) {
  if (!series.model) return;
  const far = 10 * HEIGHT;
  let [path, pen] = ["", "M"];
  series.model.x.forEach((t, i) => {
    const [left, y] = [x.place(t), series.model.y[i] === null ? NaN : scale.place(series.model.y[i])];
    if (!Number.isFinite(left) || !Number.isFinite(y)) {
      pen = "M";
      return;
    }
    path += `${pen}${short(left)} ${short(Math.max(-far, Math.min(y, far)))}`;
    pen = "L";
  });
  add(parent, "path", {
    class: "curve", d: path, fill: "none", stroke: palette()[series.colour], "stroke-width": 2, "stroke-linejoin": "round",
    "stroke-dasharray": series.dashes.join(" ") || "none",
  });
}

function drawPoints(parent, chart, series, x, scale) {
  const { edge, faint, [series.colour]: colour } = palette();
  const group = add(parent, "g", { class: "series" });
  add(group, "title", {}, series.name);
  for (const i of rowsInView(chart, series)) {
    const out = series.leftOut.has(i);
    const spread = chart.residuals ? null : uncertainty(series, i);
    const [left, y] = [x.place(series.x[i]), scale.place(series.y[i])];
    const point = add(group, "g", { class: out ? "point left-out" : "point" });
    const value = `${withUncertainty(series.y[i], spread)} ${chart.data.value_unit}`.trim();
    add(point, "title", {}, `${series.name}: ${value} at ${plain(series.x[i])} ${chart.data.time_unit}`);
    if (spread !== null && !out) {
      const lowest = series.y[i] - spread;
      const end = chart.logValue && lowest <= 0 ? BOTTOM : scale.place(lowest);
      const bar = `M${short(left)} ${short(scale.place(series.y[i] + spread))}V${short(end)}`;
      add(point, "path", { class: "bar", d: bar, stroke: colour, "stroke-width": 1.5 });
    }
    add(point, "path", {
      class: "mark", d: pathOf(series.shape, left, y, RADIUS), fill: out ? "none" : colour, stroke: out ? faint : edge,
      "stroke-width": out ? 1.3 : 0.7,
    });
  }
}

function drawKey(svg, shown, left) {
  const { edge, ink } = palette();
  const key = add(svg, "g", { class: "key", "font-family": FAMILY, "font-size": 12.5, fill: ink });
  shown.forEach((series, i) => {
    const y = TOP + 8 + 21 * i;
    const colour = palette()[series.colour];
    if (series.x.length) {
      add(key, "path", { d: pathOf(series.shape, left, y, 4.5), fill: colour, stroke: edge, "stroke-width": 0.7 });
    } else {
      const dashes = series.dashes.join(" ") || "none";
      add(key, "path", { d: `M${left - 10} ${y}h24`, stroke: colour, "stroke-width": 2, "stroke-dasharray": dashes });
    }
    add(key, "text", { x: left + 18, y: y + 4 }, shortened(series.name));
  });
}

const shortened = (name) => (name.length > 21 ? `${name.slice(0, 20)}…` : name);

/** The plot's canvas with title and key on a new one. */
function pngOf(chart) {
  const from = chart.plot.ctx.canvas;
  const ratio = window.devicePixelRatio || 1;
  const { leaf, ink, edge, ...colours } = palette();
  const canvas = document.createElement("canvas");
  canvas.width = from.width + KEY * ratio;
  canvas.height = from.height + 40 * ratio;
  const ctx = canvas.getContext("2d");
  ctx.fillStyle = leaf;
  ctx.fillRect(0, 0, canvas.width, canvas.height);
  ctx.drawImage(from, 0, 36 * ratio);
  ctx.scale(ratio, ratio);
  ctx.fillStyle = ink;
  ctx.font = `600 15px ${FAMILY}`;
  ctx.fillText(chart.data.title, 14, 24);
  ctx.font = `12.5px ${FAMILY}`;
  chart.series.filter((series) => series.shown).forEach((series, i) => {
    const [x, y] = [from.width / ratio + 16, 56 + 21 * i];
    const mark = new Path2D();
    if (series.x.length) addTo(mark, series.shape, x, y, 4.5);
    else mark.rect(x - 8, y - 1, 22, 2);
    ctx.fillStyle = colours[series.colour];
    ctx.fill(mark);
    ctx.lineWidth = 0.7;
    ctx.strokeStyle = edge;
    if (series.x.length) ctx.stroke(mark);
    ctx.fillStyle = ink;
    ctx.fillText(shortened(series.name), x + 18, y + 4);
  });
  return canvas;
}
