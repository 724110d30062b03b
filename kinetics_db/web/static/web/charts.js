// Draws every <figure class="chart"> from the JSON in it, when it comes near the window or the page is printed.
//
// A script of a page may send new numbers: figure.dispatchEvent(new CustomEvent("chart:data", { detail: data })).

import { hasTraces, renewed, scaleOf, stateOf, timeRange, wholeTime } from "./charts/data.js";
import { HEIGHT, forgetPalette, plotOf } from "./charts/paint.js";
import { buildPanel, removePanel, showChoices, showValues } from "./charts/panel.js";

const NEAR = "600px 0px";
const charts = new Map();
const waiting = new Set();

const near = new IntersectionObserver((entries) => {
  draw(entries.filter((entry) => entry.isIntersecting).map((entry) => entry.target));
}, { rootMargin: NEAR });

const sizes = new ResizeObserver((entries) => {
  for (const { target, contentRect } of entries) {
    const plot = charts.get(target.closest("figure.chart"))?.plot;
    const width = Math.floor(contentRect.width);
    if (plot && width > 0 && width !== plot.width) plot.setSize({ width, height: HEIGHT });
  }
});

/** Charts of a part of the page that have not been seen yet. */
function look(root) {
  const found = [...root.querySelectorAll("figure.chart")];
  if (root.matches?.("figure.chart")) found.push(root);
  for (const figure of found) {
    if (charts.has(figure) || waiting.has(figure)) continue;
    waiting.add(figure);
    near.observe(figure);
  }
}

/** Draw several charts: first all that changes the page, then what measures it, so that it is laid out once. */
function draw(figures) {
  const fresh = figures.filter((figure) => waiting.delete(figure));
  if (!fresh.length) return;
  const start = performance.now();
  for (const figure of fresh) open(figure);
  const widths = fresh.map((figure) => charts.get(figure).parts.plot.clientWidth);
  fresh.forEach((figure, i) => {
    const chart = charts.get(figure);
    build(chart, widths[i]);
    sizes.observe(chart.parts.plot);
  });
  // uPlot draws in microtasks that were queued before this one.
  queueMicrotask(() => performance.measure("charts", { start, end: performance.now(), detail: { drawn: fresh.length } }));
}

function open(figure) {
  near.unobserve(figure);
  const chart = stateOf(JSON.parse(figure.querySelector('script[type="application/json"]').textContent));
  settle(chart, figure);
  figure.addEventListener("chart:data", (event) => replace(figure, event.detail));
}

/** Give a chart its panel and its place in the figure. */
function settle(chart, figure) {
  chart.figure = figure;
  charts.set(figure, chart);
  buildPanel(chart, figure, changesOf(chart));
}

function replace(figure, data) {
  const old = charts.get(figure);
  const focused = focusIn(old);
  const width = old.plot.width;
  sizes.unobserve(old.parts.plot);
  old.plot.destroy();
  removePanel(old);
  const chart = renewed(old, data);
  settle(chart, figure);
  build(chart, width);
  sizes.observe(chart.parts.plot);
  if (focused >= 0) focusable(chart)[focused]?.focus();
}

const focusable = (chart) => [...chart.figure.querySelectorAll("button, a, .chart-plot")];
const focusIn = (chart) => focusable(chart).indexOf(document.activeElement);

function build(chart, width) {
  chart.plot?.destroy();
  chart.plot = null; // what the new one tells while it is made does not meet the old one
  plotOf(chart, chart.parts.plot, Math.max(Math.floor(width), 200), {
    drawn: () => { chart.figure.dataset.state = "drawn"; },
    told: () => { if (chart.plot) showValues(chart); },
    whole: () => changesOf(chart).whole(),
    zoom: (range) => zoom(chart, range),
  });
}

/** What a reader can change, each by one call. */
function changesOf(chart) {
  return {
    toggle(series) {
      series.shown = !series.shown;
      chart.plot.setSeries(chart.series.indexOf(series) + 1, { show: series.shown });
      refresh(chart);
      return series.shown;
    },
    flip(name) {
      chart[name] = !chart[name];
      if (name === "logTime") chart.zoom = null;
      build(chart, chart.plot.width);
      showChoices(chart);
      return chart[name];
    },
    closer() {
      zoom(chart, halved(chart));
    },
    whole() {
      zoom(chart, null);
    },
    point(time) {
      const u = chart.plot;
      u.setCursor({ left: u.valToPos(time, "x"), top: u.over.clientHeight / 2 });
    },
  };
}

/** Half of the time that is shown, around the time pointed at last. */
function halved(chart) {
  const to = chart.logTime ? Math.log : (value) => value;
  const from = chart.logTime ? Math.exp : (value) => value;
  const [low, high] = timeRange(chart).map(to);
  const [first, last] = wholeTime(chart).map(to);
  const middle = chart.time === null ? (low + high) / 2 : to(chart.time);
  const half = (high - low) / 4;
  const start = Math.min(Math.max(middle - half, first), last - 2 * half);
  return [from(start), from(start + 2 * half)];
}

function zoom(chart, range) {
  chart.zoom = range;
  refresh(chart);
}

/** Lay the axes out anew for what is shown now. */
function refresh(chart) {
  const u = chart.plot;
  const [min, max] = timeRange(chart);
  u.batch(() => {
    u.setScale("x", { min, max });
    for (const key of new Set(["y", ...(hasTraces(chart) ? chart.series.map((s) => scaleOf(chart, s)) : [])])) {
      u.setScale(key, { min: null, max: null });
    }
  });
  showChoices(chart);
}

function drop(root) {
  for (const [figure, chart] of charts) {
    if (!root.contains(figure)) continue;
    sizes.unobserve(chart.parts.plot);
    chart.plot.destroy();
    charts.delete(figure);
  }
}

look(document);
document.addEventListener("htmx:load", (event) => look(event.detail.elt));
document.addEventListener("htmx:beforeCleanupElement", (event) => drop(event.target));
window.addEventListener("beforeprint", () => draw([...waiting]));
window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => {
  forgetPalette();
  for (const chart of charts.values()) chart.plot.redraw();
});
