// Drawing on the canvas: uPlot lays out axes, scales, cursor and selection; points, bars and lines are drawn here.

import { aligned, drawable, hasTraces, scaleOf, timeLabel, timeRange, uncertainty, valueLabel, valueRange } from "./data.js";
import { addTo } from "./marks.js";
import { atLogTick, atTicks, logTicks } from "./numbers.js";

export const HEIGHT = 300;
export const RADIUS = 3.6;
const MOST_POINTS = 600; // of a species in view: more would hide each other
const FONT = '12px system-ui, "Segoe UI", "Liberation Sans", "DejaVu Sans", sans-serif';
const NAMES = ["ink", "faint", "grid", "edge", "leaf", "accent", "c0", "c1", "c2", "c3", "c4", "c5", "c6", "c7"];

let colours = null;

/** Colours of the style sheet in the scheme that is on. */
export function palette() {
  if (colours === null) {
    const style = getComputedStyle(document.documentElement);
    colours = Object.fromEntries(NAMES.map((name) => [name, style.getPropertyValue(`--${name}`).trim()]));
  }
  return colours;
}

export function forgetPalette() {
  colours = null;
}

/** Make the uPlot of a chart in an element. `told(chart)` is called when the cursor has moved. */
export function plotOf(chart, element, width, hooks) {
  const { data, rows } = aligned(chart);
  chart.rows = rows;
  const u = new window.uPlot(options(chart, width, hooks), data, element);
  chart.plot = u;
  return u;
}

function options(chart, width, hooks) {
  const own = chart.apart && hasTraces(chart);
  const scale = (key) => ({ distr: chart.logValue ? 3 : 1, range: () => valueRange(chart, key) });
  const axes = [axisOf(timeLabel(chart), "x", { size: 27, log: chart.logTime })];
  axes.push(axisOf(valueLabel(chart), "y", { log: chart.logValue }));
  if (own) axes.push(axisOf(`${valueLabel(chart)}, traces`, "own", { side: 1, log: chart.logValue }));
  return {
    width, height: HEIGHT, padding: [10, own ? 0 : 14, 0, 0], legend: { show: false },
    scales: {
      x: { time: false, distr: chart.logTime ? 3 : 1, range: () => timeRange(chart) },
      y: scale("y"),
      ...(own ? { own: scale("own") } : {}),
    },
    axes,
    series: [{}, ...chart.series.map((series) => ({
      label: series.name, scale: scaleOf(chart, series), show: series.shown, paths: () => null, points: { show: false },
    }))],
    cursor: {
      y: false,
      drag: { x: true, y: false, setScale: false, dist: 6 },
      dataIdx: nearest,
      points: { size: 13, width: 1.5, stroke: () => palette().ink, fill: () => "transparent" },
      bind: { dblclick: () => () => hooks.whole() },
    },
    hooks: {
      draw: [(u) => { paint(chart, u); hooks.drawn(); }],
      setCursor: [() => hooks.told()],
      setSelect: [(u) => selected(u, hooks)],
    },
  };
}

function axisOf(label, scale, { side, size, log }) {
  const axis = {
    scale, label, labelFont: FONT, font: FONT, labelSize: 20, gap: 5, stroke: () => palette().faint,
    grid: { stroke: () => palette().grid, width: 1, show: scale !== "own" },
    ticks: { stroke: () => palette().faint, width: 1, size: 5 },
    values: (u, ticks, i, space, step) => (log ? ticks.map(atLogTick) : atTicks(ticks, step)),
    size: size ?? ((u, values) => 16 + 7 * Math.max(3, ...(values ?? []).map((text) => (text ?? "").length))),
  };
  if (log) Object.assign(axis, { splits: (u, i, low, high) => logTicks([low, high]).ticks, filter: (u, ticks) => ticks });
  return side === undefined ? axis : { ...axis, side };
}

/** Each species' own nearest point to the cursor. */
function nearest(u, at, hovered) {
  if (at === 0) return hovered;
  const column = u.data[at];
  if (hovered === null || hovered === undefined || column[hovered] !== null) return hovered;
  const xs = u.data[0];
  let [before, after] = [hovered - 1, hovered + 1];
  while (before >= 0 && column[before] === null) before--;
  while (after < column.length && column[after] === null) after++;
  if (before < 0 && after >= column.length) return null;
  if (before < 0) return after;
  if (after >= column.length) return before;
  return xs[hovered] - xs[before] <= xs[after] - xs[hovered] ? before : after;
}

function selected(u, hooks) {
  const { left, width } = u.select;
  if (width <= 0) return;
  const chosen = [u.posToVal(left, "x"), u.posToVal(left + width, "x")];
  u.setSelect({ left: 0, top: 0, width: 0, height: 0 }, false);
  hooks.zoom(chosen);
}

function paint(chart, u) {
  const { ctx, bbox } = u;
  const ratio = window.devicePixelRatio || 1;
  const reach = RADIUS * 1.4 * ratio;
  ctx.save();
  if (chart.residuals) band(chart, u, ratio);
  ctx.beginPath();
  ctx.rect(bbox.left - reach, bbox.top - reach, bbox.width + 2 * reach, bbox.height + 2 * reach);
  ctx.clip();
  const shown = chart.series.filter((series) => series.shown);
  for (const series of shown) line(chart, u, series, ratio);
  for (const series of shown) points(chart, u, series, ratio);
  ctx.restore();
}

function band(chart, u, ratio) {
  const { ctx, bbox } = u;
  for (const value of [0, chart.band, -chart.band]) {
    const y = Math.round(u.valToPos(value, "y", true)) + 0.5;
    ctx.beginPath();
    ctx.setLineDash(value ? [6 * ratio, 4 * ratio] : []);
    ctx.lineWidth = ratio;
    ctx.strokeStyle = palette().faint;
    ctx.moveTo(bbox.left, y);
    ctx.lineTo(bbox.left + bbox.width, y);
    ctx.stroke();
  }
  ctx.setLineDash([]);
}

function line(chart, u, series, ratio) {
  if (!series.model) return;
  const { ctx, bbox } = u;
  const scale = scaleOf(chart, series);
  const far = 4 * bbox.height;
  let pen = false;
  ctx.beginPath();
  series.model.x.forEach((t, i) => {
    const value = series.model.y[i];
    if (!drawable(t, chart.logTime) || !drawable(value, chart.logValue)) {
      pen = false;
      return;
    }
    const x = u.valToPos(t, "x", true);
    const y = Math.max(bbox.top - far, Math.min(u.valToPos(value, scale, true), bbox.top + bbox.height + far));
    if (pen) ctx.lineTo(x, y);
    else ctx.moveTo(x, y);
    pen = true;
  });
  ctx.lineWidth = 2 * ratio;
  ctx.lineJoin = "round";
  ctx.strokeStyle = palette()[series.colour];
  ctx.setLineDash(series.dashes.map((length) => length * ratio));
  ctx.stroke();
  ctx.setLineDash([]);
}

/** Rows of a series that are drawn: in view, on the axes, and not too many. */
export function rowsInView(chart, series) {
  const [first, last] = timeRange(chart);
  const rows = [];
  series.x.forEach((t, i) => {
    const fits = drawable(t, chart.logTime) && drawable(series.y[i], chart.logValue);
    if (fits && t >= first && t <= last) rows.push(i);
  });
  return rows;
}

function points(chart, u, series, ratio) {
  const { ctx, bbox } = u;
  const { edge, faint, [series.colour]: colour } = palette();
  const scale = scaleOf(chart, series);
  const radius = RADIUS * ratio;
  const rows = rowsInView(chart, series);
  const every = Math.ceil(rows.length / MOST_POINTS);
  const [counted, out, bars] = [new Path2D(), new Path2D(), new Path2D()];
  for (let k = 0; k < rows.length; k += every) {
    const i = rows[k];
    const [x, y] = [u.valToPos(series.x[i], "x", true), u.valToPos(series.y[i], scale, true)];
    addTo(series.leftOut.has(i) ? out : counted, series.shape, x, y, radius);
    const spread = uncertainty(series, i);
    if (spread === null || series.leftOut.has(i)) continue;
    const top = u.valToPos(series.y[i] + spread, scale, true);
    if (y - top <= radius) continue; // a shorter bar would be hidden by its marker
    const lowest = series.y[i] - spread;
    bars.moveTo(x, top);
    bars.lineTo(x, drawable(lowest, chart.logValue) ? u.valToPos(lowest, scale, true) : bbox.top + bbox.height);
  }
  ctx.strokeStyle = colour;
  ctx.lineWidth = 1.5 * ratio;
  ctx.stroke(bars);
  ctx.fillStyle = colour;
  ctx.fill(counted);
  ctx.strokeStyle = edge;
  ctx.lineWidth = 0.7 * ratio;
  ctx.stroke(counted);
  ctx.strokeStyle = faint;
  ctx.lineWidth = 1.3 * ratio;
  ctx.stroke(out);
}
