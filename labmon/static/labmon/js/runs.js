// Series with gaps as the server sends them (whole numbers, x0 and dx, null for a gap) to what a plot draws. Pure.

/** Runs of indices without a gap: [first, afterLast) pairs. */
export function runsOf(values) {
  const runs = [];
  let first = -1;
  for (let index = 0; index <= values.length; index += 1) {
    const isGap = index === values.length || values[index] === null;
    if (!isGap && first < 0) first = index;
    if (isGap && first >= 0) {
      runs.push([first, index]);
      first = -1;
    }
  }
  return runs;
}

/** Times in ms of each bucket's middle. */
export function timesOf({ x0_ms: x0, dx_ms: dx, mean }) {
  return mean.map((_, index) => x0 + (index + 0.5) * dx);
}

/** The envelope as one closed polygon for each run without gap, with null between: x and y. */
export function envelope(series) {
  const x = [];
  const y = [];
  const half = series.dx_ms / 2;
  const times = timesOf(series);
  for (const [first, after] of runsOf(series.mean)) {
    const there = [];
    for (let index = first; index < after; index += 1) there.push(index);
    const ends = after - first === 1 ? [-half, half] : [0];
    for (const index of there) for (const end of ends) { x.push(times[index] + end); y.push(series.max[index] / series.scale); }
    for (const index of there.reverse()) for (const end of [...ends].reverse()) { x.push(times[index] + end); y.push(series.min[index] / series.scale); }
    x.push(x[x.length - (there.length * ends.length * 2)], null);
    y.push(series.max[first] / series.scale, null);
  }
  return { x, y };
}

/** Values back in their unit, null kept. */
export function valuesOf(series, name) {
  return series[name].map((value) => (value === null ? null : value / series.scale));
}

/** Lowest and highest of the envelope and of `also`, with a little room; null when there is nothing. */
export function rangeOf(series, also = []) {
  const seen = [...series.min, ...series.max].filter((value) => value !== null).map((value) => value / series.scale);
  const all = seen.concat(also);
  if (all.length === 0) return null;
  let low = Infinity;
  let high = -Infinity;
  for (const value of all) {
    if (value < low) low = value;
    if (value > high) high = value;
  }
  const room = Math.max((high - low) * 0.08, Math.abs(high) * 1e-3, 1e-6);
  return [low - room, high + room];
}

/** Per bucket whether less than half of it is trusted (a bucket without value is not doubtful, it is a gap). */
export function doubtfulPlaces(series) {
  return series.trusted.map((share, index) => series.mean[index] !== null && share !== null && share < 50);
}
