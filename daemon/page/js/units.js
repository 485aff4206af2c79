// SI to what people read, in the system chosen; the digits follow the standard deviation.

const PSI = 6894.757293168;
const WATER = 9806.65;
const BARREL = 0.158987294928;
const FOOT = 0.3048;
const DAY = 86400;

let system = "metric";
let zone = "utc";

export const choose = (units) => (system = units);
export const chooseZone = (z) => (zone = z);
export const chosenZone = () => zone;

function pressureUnit(size) {
  if (system === "field") return [PSI, "psi"];
  if (system === "head") return [WATER, "m H₂O"];
  return Math.abs(size) >= 2e6 ? [1e6, "MPa"] : Math.abs(size) >= 100 || size === 0 ? [1e3, "kPa"] : [1, "Pa"];
}

const units = {
  pressure: pressureUnit,
  barometer: pressureUnit,
  rate: () => (system === "field" ? [BARREL / DAY, "bbl/d"] : [1 / DAY, "m³/d"]),
  length: () => (system === "field" ? [FOOT, "ft"] : [1, "m"]),
  stage: () => (system === "field" ? [FOOT, "ft"] : [1, "m"]),
  temperature: () => [1, "°C"],
  rain: () => [1e-3 / DAY, "mm/d"],
};

/// Factor and name of a kind's unit for values of a size.
export const unit = (kind, size) => (units[kind] ?? (() => [1, ""]))(size);

/// A number with a true minus sign.
export const number = (value, places) => value.toFixed(places).replace("-", "−");

const places = (step) => (step > 0 && Number.isFinite(step) ? Math.min(6, Math.max(0, 1 - Math.floor(Math.log10(step) + 1e-9))) : 2);

export function quantity(kind, si, sign) {
  if (si === null || si === undefined || !Number.isFinite(si)) return "none";
  const [factor, label] = unit(kind, si);
  const shown = si / factor;
  const text = number(shown, places(Math.abs(shown) / (kind === "length" ? 10 : 100) || 0.01));
  return `${sign && shown > 0 ? "+" : ""}${text} ${label}`;
}

export function spread(kind, si, sd, sign) {
  // Millions of Pascal known to a few are read as thousands.
  const size = Math.max(Math.abs(si), Math.abs(sd));
  const [factor, label] = unit(kind, kind === "pressure" && sd < 1000 ? Math.min(size, 1.9e6) : size);
  const p = places(Math.abs(sd / factor));
  return `${sign && si > 0 ? "+" : ""}${number(si / factor, p)} ± ${number(sd / factor, p)} ${label}`;
}

export function size(of, cause) {
  if (of.unit === "m3/s") return spread("rate", of.value, of.sd);
  if (of.unit === "Pa") return spread("pressure", of.value, of.sd, true);
  if (of.unit === "Pa/s") {
    const year = 365.25 * DAY;
    return `${spread("pressure", of.value * year, of.sd * year, true)} a year`;
  }
  if (cause === "well-skin") return `${number(of.value, places(of.sd))} ± ${number(of.sd, places(of.sd))}`;
  const p = places(Math.abs(of.sd * 100));
  return `${number(of.value * 100, p)} ± ${number(of.sd * 100, p)} %`;
}

export const deviations = (z) => (z === null || z === undefined ? "not judged" : `${z > 0 ? "+" : ""}${number(z, Math.abs(z) < 9.95 ? 1 : 0)} sd`);

export function span(seconds) {
  const s = Math.abs(seconds);
  for (const [length, label] of [[DAY * 365.25, "years"], [DAY, "d"], [3600, "h"], [60, "min"]]) {
    if (s >= 2 * length) return `${number(s / length, s / length < 10 ? 1 : 0).replace(/\.0$/, "")} ${label}`;
  }
  return `${number(s, 0)} s`;
}

const formats = {};
function format(options) {
  const key = JSON.stringify(options) + zone;
  formats[key] ??= new Intl.DateTimeFormat("en-GB", { timeZone: zone === "utc" ? "UTC" : undefined, ...options });
  return formats[key];
}

const ms = (at) => (typeof at === "number" ? at * 1000 : Date.parse(at));
const zoneName = () => (zone === "utc" ? "UTC" : format({ timeZoneName: "short" }).formatToParts(new Date()).find((p) => p.type === "timeZoneName").value);

export const instant = (at) => `${format({ day: "numeric", month: "short", year: "numeric", hour: "2-digit", minute: "2-digit" }).format(ms(at)).replace(",", "")} ${zoneName()}`;
export const day = (at) => format({ day: "numeric", month: "short" }).format(ms(at));
export const month = (at) => format({ month: "short", year: "numeric" }).format(ms(at));
export const clock = (at) => format({ hour: "2-digit", minute: "2-digit" }).format(ms(at));

export function bytes(count) {
  const [factor, label] = count >= 1e9 ? [1e9, "GB"] : count >= 1e6 ? [1e6, "MB"] : [1e3, "kB"];
  return `${number(count / factor, count / factor < 10 ? 1 : 0)} ${label}`;
}

/// Ticks of a time axis between two instants [s], at most `most`.
export function timeTicks(from, to, most) {
  const steps = [3600, 3 * 3600, 6 * 3600, 12 * 3600, DAY, 2 * DAY, 5 * DAY, 10 * DAY, 20 * DAY, 30 * DAY, 61 * DAY, 122 * DAY, 365.25 * DAY, 2 * 365.25 * DAY];
  const step = steps.find((st) => (to - from) / st <= most) ?? steps.at(-1);
  const offset = zone === "utc" ? 0 : -new Date(from * 1000).getTimezoneOffset() * 60;
  const ticks = [];
  for (let t = Math.ceil((from + offset) / step) * step - offset; t <= to; t += step) {
    ticks.push([t, step < DAY ? ((t + offset) % DAY === 0 ? day(t) : clock(t)) : step < 40 * DAY ? day(t) : month(t)]);
  }
  return ticks;
}

/// Round ticks of a value axis.
export function valueTicks(low, high, most) {
  const raw = (high - low) / most;
  const power = 10 ** Math.floor(Math.log10(raw));
  const step = [1, 2, 5, 10].map((m) => m * power).find((st) => st >= raw);
  const ticks = [];
  for (let v = Math.ceil(low / step) * step; v <= high + step * 1e-6; v += step) ticks.push(v);
  return [ticks, Math.max(0, -Math.floor(Math.log10(step) + 1e-9))];
}
