// Numbers to text, as labmon/screen/present.py says them. Pure: no page, no clock.

export const MISSING = '–';
const GAP = '\u00a0';
const MINUS = '\u2212';

/** `value` with `places` decimals and unit; missing or not finite: a dash. */
export function numberText(value, places, unit = '', { sign = '', signed = false } = {}) {
  if (value === null || value === undefined || !Number.isFinite(value)) return MISSING;
  const body = Math.abs(value).toFixed(places);
  const isZero = Number(body) === 0;
  const before = isZero ? '' : value < 0 ? MINUS : signed ? '+' : '';
  const gap = unit === '' || unit === '°' ? '' : GAP;
  return `${sign ? sign + GAP : ''}${before}${body}${gap}${unit}`;
}

/** How long ago: `8 s`, `4 min`, `1 h 44`, `3 d 5 h`. */
export function ageText(seconds) {
  if (seconds === null || seconds === undefined || !Number.isFinite(seconds)) return 'never';
  const whole = Math.max(0, Math.floor(seconds));
  if (whole < 60) return `${whole}${GAP}s`;
  if (whole < 3600) return `${Math.floor(whole / 60)}${GAP}min`;
  if (whole < 86400) {
    const minutes = String(Math.floor((whole % 3600) / 60)).padStart(2, '0');
    return `${Math.floor(whole / 3600)}${GAP}h${GAP}${minutes}`;
  }
  return `${Math.floor(whole / 86400)}${GAP}d${GAP}${Math.floor((whole % 86400) / 3600)}${GAP}h`;
}

/** Angle on the sphere (degrees) of an extinction ratio (dB), all light polarized: tan²(γ/2) = 10^(−ER/10). */
export function angleFromEr(erDb) {
  return (2 * Math.atan(10 ** (-erDb / 20)) * 180) / Math.PI;
}

/** The inverse of angleFromEr, dB. */
export function erFromAngle(angleDeg) {
  return -20 * Math.log10(Math.tan((angleDeg * Math.PI) / 360));
}

/** ISO 8601 interval of two times in ms, whole seconds. */
export function spanText(fromMs, untilMs) {
  const iso = (ms) => new Date(Math.round(ms / 1000) * 1000).toISOString().replace('.000Z', 'Z');
  return `${iso(fromMs)}/${iso(untilMs)}`;
}

/** The two times (ms) of an ISO 8601 interval start/end, or null. */
export function parseSpan(text) {
  const parts = (text || '').split('/').map((part) => Date.parse(part));
  return parts.length === 2 && parts.every(Number.isFinite) && parts[0] < parts[1] ? parts : null;
}

/** A span moved or scaled about its middle; it never ends after `latestMs`. */
export function changedSpan([from, until], { move = 0, scale = 1 }, latestMs) {
  const width = Math.max(10_000, (until - from) * scale);
  const middle = (from + until) / 2 + move * (until - from);
  const end = Math.min(middle + width / 2, latestMs);
  return [end - width, end];
}

/** A moment in UTC to the second. */
export function timeText(ms) {
  return new Date(ms).toISOString().slice(0, 19).replace('T', ' ');
}
