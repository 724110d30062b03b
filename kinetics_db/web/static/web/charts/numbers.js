// Numbers as the pages write them: a true minus sign, powers of ten written out, uncertainties in brackets.

const RAISED = { "-": "⁻", 0: "⁰", 1: "¹", 2: "²", 3: "³", 4: "⁴", 5: "⁵", 6: "⁶", 7: "⁷", 8: "⁸", 9: "⁹" };

const signed = (text) => text.replace("-", "−");
const powerOf = (value) => (value === 0 ? 0 : Math.floor(Math.log10(Math.abs(value)) + 1e-12));
const isPlain = (power) => power >= -3 && power <= 5;

export function timesTen(power) {
  return ` × 10${[...String(power)].map((letter) => RAISED[letter]).join("")}`;
}

/** A value with that many digits. */
export function plain(value, digits = 4) {
  if (value === null || !Number.isFinite(value)) return "–";
  if (value === 0) return "0";
  const power = powerOf(value);
  if (!isPlain(power)) return signed(String(Number((value / 10 ** power).toPrecision(digits)))) + timesTen(power);
  return signed(String(Number(value.toPrecision(digits))));
}

/** A value with two digits of its standard uncertainty: 1.234(56), or 12.3(4.5) where that passes the point. */
export function withUncertainty(value, u) {
  if (value === null || u === null || !(u > 0)) return plain(value);
  const power = powerOf(Math.max(Math.abs(value), u));
  if (!isPlain(power)) return withUncertainty(value / 10 ** power, u / 10 ** power) + timesTen(power);
  const decimals = Math.max(0, 1 - powerOf(u));
  const spread = u >= 1 ? u.toFixed(decimals) : String(Math.round(u * 10 ** decimals));
  return `${signed(value.toFixed(decimals))}(${spread})`;
}

/** Numbers at ticks that stand a step apart. */
export function atTicks(ticks, step) {
  const digits = Number((step / 10 ** powerOf(step)).toPrecision(6)); // 0.25 needs a digit more than 0.2
  const decimals = Math.max(0, -powerOf(step) + (Number.isInteger(digits) ? 0 : 1));
  const largest = Math.max(...ticks.map(Math.abs));
  const power = powerOf(largest);
  if (decimals > 5 || largest >= 1e6) {
    const further = Math.max(0, power + decimals);
    return ticks.map((t) => (t === 0 ? "0" : signed((t / 10 ** power).toFixed(Math.min(further, 6))) + timesTen(power)));
  }
  return ticks.map((t) => signed(t.toFixed(decimals).replace(/^-(0\.?0*)$/, "$1")));
}

/** A number at a tick of a logarithmic axis. */
export const atLogTick = (tick) => plain(tick, 2);

/** The smallest of 1, 2 and 5 times a power of ten that is not below a rough step. */
export function niceStep(rough) {
  const power = 10 ** Math.floor(Math.log10(rough));
  return [1, 2, 5, 10].map((factor) => factor * power).find((step) => step >= rough * (1 - 1e-9));
}

/** Ticks of a linear axis. */
export function linearTicks([low, high], about) {
  const step = niceStep((high - low) / about);
  const ticks = [];
  for (let i = Math.ceil(low / step - 1e-9); i * step <= high + 1e-9 * step; i++) ticks.push(i * step);
  return { ticks, labels: atTicks(ticks, step) };
}

/** Ticks of a logarithmic axis: decades, with 2 and 5 between them where there is room. */
export function logTicks([low, high]) {
  const decades = Math.log10(high / low);
  const factors = decades > 4 ? [1] : decades > 1 ? [1, 2, 5] : [1, 2, 3, 4, 5, 6, 7, 8, 9];
  const ticks = [];
  for (let power = Math.floor(Math.log10(low)); power <= Math.log10(high); power++) {
    for (const factor of factors) {
      const tick = factor * 10 ** power;
      if (tick >= low * (1 - 1e-9) && tick <= high * (1 + 1e-9)) ticks.push(tick);
    }
  }
  return { ticks, labels: ticks.map(atLogTick) };
}
