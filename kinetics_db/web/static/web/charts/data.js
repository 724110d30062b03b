// A chart's state: what the page gave, what the reader chose, and the ranges of the axes that follow from both.

import { colourOf, dashesOf, shapeOf } from "./marks.js";

const TRACE = 0.05; // a series whose largest value is below this share of the chart's is a trace
const MODEL_ROOM = 0.5; // a curve may leave the measured range by this share of it
const LOG_DEPTH = 1e-6; // a logarithmic axis reaches this far below its largest value
const BAND = 2; // standardised residuals beyond this are one in twenty

/** The state of a chart, all species shown on linear axes. */
export function stateOf(data) {
  const chart = {
    data, series: data.series.map((given) => seriesOf(given, data)), residuals: data.kind === "residuals", band: BAND,
    logTime: false, logValue: false, apart: false, zoom: null, time: null, plot: null,
  };
  const largest = chart.series.map(largestOf);
  const top = Math.max(...largest, 0);
  chart.series.forEach((s, i) => {
    s.trace = !chart.residuals && largest[i] > 0 && largest[i] < TRACE * top;
  });
  return chart;
}

/** New numbers for a chart; what the reader chose stays. */
export function renewed(chart, data) {
  const fresh = stateOf(data);
  const hidden = new Set(chart.series.filter((s) => !s.shown).map((s) => s.name));
  fresh.series.forEach((s) => { s.shown = !hidden.has(s.name); });
  const { logTime, logValue, apart, zoom } = chart;
  return Object.assign(fresh, { logTime, logValue, apart, zoom });
}

function seriesOf(given, data) {
  const model = given.model && { x: given.model.x ?? data.model_x, y: given.model.y };
  const x = given.x ?? data.x ?? [];
  return {
    name: given.name, x, y: given.y, u: given.u, leftOut: new Set(given.left_out ?? []), model,
    colour: colourOf(given.position), shape: shapeOf(given.position), dashes: x.length ? [] : dashesOf(given.position),
    shown: true, trace: false,
  };
}

function largestOf(series) {
  let largest = 0;
  for (const values of [series.y, series.model?.y ?? []]) {
    for (const value of values) if (value !== null && value > largest) largest = value;
    if (largest > 0) break; // the points decide where there are any
  }
  return largest;
}

export const hasTraces = (chart) => chart.series.some((s) => s.trace);
export const scaleOf = (chart, series) => (chart.apart && series.trace ? "own" : "y");
export const uncertainty = (series, i) => (series.u === null ? null : series.u[i]);

/** Whether a value can stand on an axis. */
export const drawable = (value, log) => value !== null && value !== undefined && (!log || value > 0);

/** Where each series has the value that is told at a time: at its points, or at its curve when it has no points. */
export function told(series) {
  return series.x.length || !series.model
    ? { x: series.x, y: series.y, measured: true }
    : { x: series.model.x, y: series.model.y, measured: false };
}

/** All times at which something is told, and for each series its values there, null elsewhere. */
export function aligned(chart) {
  const times = new Set();
  const columns = chart.series.map((series) => {
    const { x, y } = told(series);
    const column = new Map();
    x.forEach((t, i) => {
      if (!drawable(t, chart.logTime)) return;
      times.add(t);
      if (drawable(y[i], chart.logValue)) column.set(t, i);
    });
    return { column, y };
  });
  const xs = [...times].sort((a, b) => a - b);
  return {
    data: [xs, ...columns.map(({ column, y }) => xs.map((t) => (column.has(t) ? y[column.get(t)] : null)))],
    rows: columns.map(({ column }) => xs.map((t) => column.get(t) ?? null)),
  };
}

/** Range of the time axis. */
export function timeRange(chart) {
  return chart.zoom ?? wholeTime(chart);
}

export function wholeTime(chart) {
  let [low, high] = [Infinity, -Infinity];
  for (const series of chart.series) {
    for (const x of [series.x, chart.logTime && series.x.length ? [] : series.model?.x ?? []]) {
      for (const t of x) {
        if (!drawable(t, chart.logTime)) continue;
        if (t < low) low = t;
        if (t > high) high = t;
      }
    }
  }
  if (chart.logTime) return low < high ? [low / 1.15, high * 1.05] : low < Infinity ? [low / 2, low * 2] : [0.1, 1];
  low = Math.min(low, 0);
  return high > low ? [low, high + 0.01 * (high - low)] : [low, low + 1];
}

/** Range of a value axis, "y" or "own", for what is shown in the chosen time. */
export function valueRange(chart, scale) {
  const shown = chart.series.filter((s) => s.shown && scaleOf(chart, s) === scale);
  if (chart.residuals) return residualRange(shown);
  const points = extremes(shown, chart);
  return chart.logValue ? logRange(points, shown, chart) : linearRange(points, shown, chart);
}

function residualRange(shown) {
  let far = 1.5 * BAND;
  for (const series of shown) for (const value of series.y) if (value !== null) far = Math.max(far, Math.abs(value));
  return [-1.06 * far, 1.06 * far];
}

function extremes(shown, chart) {
  const [first, last] = timeRange(chart);
  let [low, high] = [Infinity, -Infinity];
  for (const series of shown) {
    series.y.forEach((value, i) => {
      if (!drawable(value, chart.logValue) || series.x[i] < first || series.x[i] > last) return;
      const spread = uncertainty(series, i) ?? 0;
      low = Math.min(low, chart.logValue ? value : value - spread);
      high = Math.max(high, value + spread);
    });
  }
  return [low, high];
}

function modelExtremes(series, chart) {
  const [first, last] = timeRange(chart);
  let [low, high] = [Infinity, -Infinity];
  (series.model?.y ?? []).forEach((value, i) => {
    if (!drawable(value, chart.logValue) || series.model.x[i] < first || series.model.x[i] > last) return;
    low = Math.min(low, value);
    high = Math.max(high, value);
  });
  return [low, high];
}

function linearRange([low, high], shown, chart) {
  const measured = high >= low;
  if (!chart.zoom) low = Math.min(low, 0);
  const room = measured ? MODEL_ROOM * (high - low) : Infinity;
  const [bottom, top] = [low - room, high + room];
  for (const series of shown) {
    const [least, most] = modelExtremes(series, chart);
    if (most < least) continue;
    low = Math.min(low, measured ? Math.max(least, bottom) : least);
    high = Math.max(high, measured ? Math.min(most, top) : most);
  }
  if (!(high >= low)) return [0, 1];
  if (high === low) return [low - (Math.abs(low) * 0.1 || 1), high + (Math.abs(high) * 0.1 || 1)];
  const pad = 0.04 * (high - low);
  return [low === 0 ? 0 : low - pad, high + pad];
}

function logRange([low, high], shown, chart) {
  if (!(high >= low)) {
    for (const series of shown) {
      const [least, most] = modelExtremes(series, chart);
      [low, high] = [Math.min(low, least), Math.max(high, most)];
    }
  }
  if (!(high >= low)) return [0.1, 1];
  low = Math.max(low, LOG_DEPTH * high);
  return high > 1.5 * low ? [low / 1.25, high * 1.25] : [low / 2, high * 2];
}

/** How many points of the shown species cannot stand on a logarithmic axis. */
export function notOnLog(chart) {
  let [times, values] = [0, 0];
  for (const series of chart.series.filter((s) => s.shown)) {
    series.x.forEach((t, i) => {
      if (series.y[i] === null) return;
      if (!drawable(t, chart.logTime)) times++;
      else if (!drawable(series.y[i], chart.logValue)) values++;
    });
  }
  return { times, values };
}

/** A model's value at a time, null outside of its curve. */
export function modelAt(series, time) {
  const { x, y } = series.model ?? { x: [], y: [] };
  let [low, high] = [0, x.length - 1];
  if (high < 0 || time < x[0] || time > x[high]) return null;
  while (high - low > 1) {
    const middle = (low + high) >> 1;
    if (x[middle] <= time) low = middle;
    else high = middle;
  }
  if (y[low] === null || y[high] === null) return null;
  return high === low ? y[low] : y[low] + ((y[high] - y[low]) * (time - x[low])) / (x[high] - x[low]);
}

/** A unit after a quantity, as on an axis. */
export const perUnit = (quantity, unit) => (unit ? `${quantity} / ${unit.includes("/") ? `(${unit})` : unit}` : quantity);
export const timeLabel = (chart) => perUnit("time", chart.data.time_unit);
export const quantityOf = (chart) => (chart.data.kind === "signals" ? "signal" : "concentration");
export const valueLabel = (chart) =>
  chart.residuals ? "standardised residual" : perUnit(quantityOf(chart), chart.data.value_unit);
