// The history plot: envelope, mean, limit lines, alarm spans as brackets on the limit line, gaps hatched and named.
// Zooming and moving ask the server again. For Stokes taps the trail shares its span.

import { angleFromEr, changedSpan, erFromAngle, parseSpan, spanText } from './format.js';
import { noteTruth, onChange, serverNowMs } from './live.js';
import { startTrail } from './trail.js';
import { doubtfulPlaces, envelope, rangeOf, timesOf, valuesOf } from './runs.js';

const DEBOUNCE_MS = 120;
const FOLLOW_EVERY_MS = 5000;
const CONFIG = { displaylogo: false, displayModeBar: false, showSendToCloud: false, plotlyServerURL: '', topojsonURL: '',
  responsive: true, scrollZoom: false, doubleClick: false };
const ANGLES = [1, 2, 3, 5, 7, 10, 15, 20, 30, 45, 60, 90, 120, 150];
const RATIOS = [0, 1, 2, 3, 4, 6, 8, 10, 12, 15, 17, 20, 23, 25, 27, 30, 35, 40];
const NAMES = { er_db: 'extinction ratio (dB)', angle_deg: 'angle from the wanted state (°)', dop: 'degree of polarization',
  power_w: 'power (dBm)', temperature_c: 'temperature (°C)', humidity_pct: 'humidity (%)', pressure_hpa: 'pressure (hPa)' };

function colours() {
  const style = getComputedStyle(document.documentElement);
  const of = (name) => style.getPropertyValue(name).trim();
  return { ink: of('--ink'), soft: of('--soft'), line: of('--line'), sheet: of('--sheet'), below: of('--below'),
    thin: of('--thin'), band: of('--band'), rule: of('--rule') };
}

function gapTraces(series, [low, high], paint) {
  const x = [];
  const y = [];
  for (const [from, until] of series.gaps) {
    x.push(from, from, until, until, from, null);
    y.push(low, high, high, low, low, null);
  }
  return { x, y, type: 'scatter', mode: 'lines', fill: 'toself', line: { width: 0 }, hoverinfo: 'skip', fillcolor: 'rgba(0,0,0,0)',
    fillpattern: { shape: '/', size: 7, solidity: 0.12, fgcolor: paint.rule, bgcolor: 'rgba(0,0,0,0)' } };
}

function gapWords(series, [from, until], paint) {
  return series.gaps.filter(([start, end]) => (end - start) / (until - from) > 0.03).map(([start, end, word]) => ({
    x: (Math.max(start, from) + Math.min(end, until)) / 2, xref: 'x', y: 0.66, yref: 'paper', text: word, showarrow: false,
    textangle: -90, font: { color: paint.ink, size: 12 }, bgcolor: paint.sheet }));
}

function limitTraces(series, [from, until], paint) {
  const traces = [];
  for (const limit of series.limits) {
    const x = [Math.max(limit.from_ms, from), Math.min(limit.until_ms ?? until, until)];
    traces.push({ x, y: [limit.alarm, limit.alarm], type: 'scatter', mode: 'lines', hoverinfo: 'skip', line: { color: paint.ink, width: 2 } });
    if (limit.warning !== null) {
      traces.push({ x, y: [limit.warning, limit.warning], type: 'scatter', mode: 'lines', hoverinfo: 'skip',
        line: { color: paint.soft, width: 1.2, dash: 'dash' } });
    }
  }
  return traces;
}

function alarmTraces(series, [from, until], paint) {
  return series.alarms.map((alarm) => {
    const start = Math.max(alarm.from_ms, from);
    const end = Math.min(alarm.until_ms ?? until, until);
    const colour = alarm.level === 'alarm' ? paint.below : paint.thin;
    return { x: [start, end], y: [alarm.at, alarm.at], type: 'scatter', mode: 'lines+markers', line: { color: colour, width: 4 },
      marker: { symbol: [alarm.from_ms >= from ? 'triangle-down' : 'line-ns', alarm.until_ms === null ? 'line-ns' : 'line-ns-open'], size: [11, 11], color: colour,
        line: { width: [0, 2], color: colour } },
      hovertemplate: `${alarm.word}<extra></extra>` };
  });
}

/** The logbook: an upright line for each entry, whole where the configuration changed; a span is a bar along the foot. */
function markShapes(marks, paint) {
  const lines = marks.map((mark) => ({ type: 'line', xref: 'x', yref: 'paper', x0: mark.at_ms, x1: mark.at_ms, y0: 0, y1: 1, layer: 'above',
    line: { color: mark.is_change ? paint.ink : paint.soft, width: mark.is_change ? 1.6 : 1, dash: mark.is_change ? 'solid' : 'dot' } }));
  const bars = marks.filter((mark) => mark.until_ms !== null).map((mark) => ({ type: 'rect', xref: 'x', yref: 'paper', x0: mark.at_ms,
    x1: mark.until_ms, y0: 0, y1: 0.012, layer: 'above', line: { width: 0 }, fillcolor: paint.soft }));
  return [...lines, ...bars];
}

/** Words at the head of the lines; of a crowd the changes and the first keep theirs, the list below has all. */
function markWords(marks, [from, until], isNarrow, paint) {
  const inside = marks.filter((mark) => mark.at_ms >= from && mark.at_ms <= until);
  const kept = [];
  const nearest = (until - from) * (isNarrow ? 0.09 : 0.03);
  for (const mark of [...inside].sort((a, b) => Number(b.is_change) - Number(a.is_change))) {
    if (kept.every((other) => Math.abs(other.at_ms - mark.at_ms) > nearest)) kept.push(mark);
  }
  return kept.map((mark) => ({ x: mark.at_ms, xref: 'x', y: 1, yref: 'paper', yanchor: 'top', textangle: -90, text: mark.word.replaceAll('<', '‹'),
    xanchor: mark.at_ms > until - nearest ? 'right' : 'left', showarrow: false, font: { color: paint.ink, size: 12 }, bgcolor: paint.sheet, opacity: 0.9 }));
}

function mainTraces(series, name, axes, paint) {
  const band = envelope(series);
  const times = timesOf(series);
  const isDoubtful = doubtfulPlaces(series);
  const low = valuesOf(series, 'min');
  const high = valuesOf(series, 'max');
  const hover = times.map((_, index) => (low[index] === null ? '' : `${low[index].toFixed(2)} to ${high[index].toFixed(2)}`));
  return [
    { ...axes, x: band.x, y: band.y, type: 'scatter', mode: 'lines', fill: 'toself', fillcolor: paint.band, line: { width: 0.5, color: paint.rule }, hoverinfo: 'skip' },
    { ...axes, x: times, y: valuesOf(series, 'mean').map((value, index) => (isDoubtful[index] ? null : value)), type: 'scatter', mode: 'lines',
      connectgaps: false, hoverinfo: 'skip', line: { color: paint.ink, width: 1.6 } },
    { ...axes, x: times, y: valuesOf(series, 'mean'), type: 'scatter', mode: 'markers', marker: { opacity: 0 }, name, text: hover,
      hovertemplate: '%{x|%d %b %H:%M:%S}  %{y:.2f} (%{text})<extra></extra>' },
  ];
}

/** The mean where less than half of a bucket is trusted: dotted, joined to its neighbours. */
function doubtTrace(series, paint) {
  const y = valuesOf(series, 'mean');
  const isDoubtful = doubtfulPlaces(series);
  return { x: timesOf(series), y: y.map((value, index) => (isDoubtful[index] || isDoubtful[index - 1] || isDoubtful[index + 1] ? value : null)),
    type: 'scatter', mode: 'lines', connectgaps: false, hoverinfo: 'skip', line: { color: paint.ink, width: 1.4, dash: 'dot' } };
}

/** Those whose places on an axis of this height are not too close for their words; the first of a crowd stays. */
function apart(values, placeOf, height) {
  const kept = [];
  for (const value of values) {
    if (kept.every((other) => Math.abs(placeOf(other) - placeOf(value)) > height * 0.055)) kept.push(value);
  }
  return kept;
}

/** Right-hand scale: the same axis in degrees (for ER) or in dB (for angles). */
function twinAxis(quantity, [low, high], paint) {
  const inside = (value) => value >= low && value <= high;
  const base = { overlaying: 'y', side: 'right', showgrid: false, range: [low, high], fixedrange: true, color: paint.soft, ticks: 'outside' };
  if (quantity === 'er_db') {
    const angles = apart(ANGLES.filter((angle) => inside(erFromAngle(angle))), erFromAngle, high - low);
    return { ...base, tickvals: angles.map(erFromAngle), ticktext: angles.map((angle) => `${angle}°`), title: { text: 'angle on the sphere' } };
  }
  if (quantity === 'angle_deg') {
    const ers = apart(RATIOS.filter((er) => inside(angleFromEr(er))), angleFromEr, high - low);
    return { ...base, tickvals: ers.map(angleFromEr), ticktext: ers.map((er) => `${er} dB`), title: { text: 'extinction ratio' } };
  }
  return null;
}

function figure(answer, isNarrow) {
  const paint = colours();
  const { series, temperature, span_ms: span } = answer;
  const also = series.limits.flatMap((limit) => [limit.alarm, ...(limit.warning === null ? [] : [limit.warning])]);
  const range = rangeOf(series, also) || [0, 1];
  const axis = { color: paint.soft, gridcolor: paint.line, linecolor: paint.rule, zeroline: false, fixedrange: true };
  const layout = {
    paper_bgcolor: paint.sheet, plot_bgcolor: paint.sheet, showlegend: false, dragmode: isNarrow ? 'pan' : 'zoom', hovermode: 'x',
    font: { family: '"DejaVu Sans Condensed", "Noto Sans", "DejaVu Sans", sans-serif', size: 13, color: paint.ink },
    margin: { l: isNarrow ? 44 : 62, r: isNarrow ? 40 : 62, t: 12, b: 40 }, height: (temperature ? 540 : 400) * (isNarrow ? 0.8 : 1),
    xaxis: { ...axis, type: 'date', range: span, fixedrange: false, ticks: 'outside', anchor: temperature ? 'y2' : 'y' },
    yaxis: { ...axis, range, domain: temperature ? [0.32, 1] : [0, 1], title: { text: isNarrow ? '' : NAMES[series.quantity] } },
    annotations: [...gapWords(series, span, paint), ...markWords(answer.marks, span, isNarrow, paint)],
    shapes: markShapes(answer.marks, paint),
    hoverlabel: { bgcolor: paint.sheet, font: { color: paint.ink } },
  };
  const traces = [gapTraces(series, range, paint), ...mainTraces(series, NAMES[series.quantity], {}, paint), doubtTrace(series, paint),
    ...limitTraces(series, span, paint), ...alarmTraces(series, span, paint)];
  const twin = twinAxis(series.quantity, range, paint);
  if (twin) {
    layout.yaxis3 = isNarrow ? { ...twin, title: { text: '' } } : twin;
    traces.push({ x: [span[0]], y: [range[0]], yaxis: 'y3', type: 'scatter', mode: 'markers', marker: { opacity: 0 }, hoverinfo: 'skip' });
  }
  if (temperature) {
    layout.yaxis2 = { ...axis, domain: [0, 0.24], range: rangeOf(temperature) || [0, 1], title: { text: isNarrow ? '' : 'temperature (°C)' }, nticks: 5 };
    const steady = { ...temperature, trusted: temperature.trusted.map(() => null) };
    traces.push(...mainTraces(steady, NAMES.temperature_c, { yaxis: 'y2' }, paint));
  }
  return { traces, layout };
}

/** One tap's history on the page. */
class History {
  constructor(root) {
    this.root = root;
    this.plot = root.querySelector('.plot');
    this.sentence = root.querySelector('[data-sentence]');
    this.fault = root.querySelector('[data-fault]');
    this.tap = Number(root.dataset.tap);
    const asked = parseSpan(root.dataset.span);
    this.isFollowing = root.dataset.following === 'yes';
    this.span = asked;
    this.timer = null;
    this.drawnMs = 0;
    this.listeners = [];
  }

  async draw() {
    const asked = this.span;
    const address = `${this.root.dataset.url}?quantity=${this.root.dataset.quantity}&points=${this.points()}&span=${spanText(...asked)}`;
    try {
      const answer = await fetch(address);
      if (!answer.ok) throw new Error(`The server answered ${answer.status}.`);
      const fresh = await answer.json();
      if (asked !== this.span) return;
      this.show(fresh);
    } catch (error) {
      this.fault.hidden = false;
      this.fault.textContent = `This span could not be fetched: ${error.message} Try again, or reload the page.`;
    }
  }

  points() {
    return Math.min(2000, Math.max(200, Math.round(this.plot.clientWidth)));
  }

  show(answer) {
    this.fault.hidden = true;
    const { traces, layout } = figure(answer, this.plot.clientWidth < 560);
    this.answer = answer;
    this.plot.style.height = `${layout.height}px`;
    window.Plotly.react(this.plot, traces, layout, CONFIG).then(() => {
      if (!this.isListening) this.listen();
      this.root.dataset.drawn = spanText(...this.span);
    });
    this.sentence.textContent = answer.sentence;
    this.list(answer.marks);
    this.drawnMs = Date.now();
    noteTruth();
  }

  /** The same marks as a list, for keyboard and ear. */
  list(marks) {
    const place = this.root.querySelector('[data-marks]');
    if (!place || place.contains(document.activeElement)) return;
    place.hidden = marks.length === 0;
    place.querySelector('ol').replaceChildren(...marks.map((mark) => {
      const line = document.createElement('li');
      const said = document.createElement(mark.href ? 'a' : 'span');
      if (mark.href) said.href = mark.href;
      said.textContent = `${mark.when} ${mark.word}`;
      line.append(said);
      if (mark.text && mark.text !== mark.word) {
        const text = document.createElement('span');
        text.className = 'soft';
        text.textContent = ` ${mark.text}`;
        line.append(text);
      }
      return line;
    }));
  }

  listen() {
    this.isListening = true;
    this.plot.on('plotly_relayout', (change) => {
      const from = change['xaxis.range[0]'];
      const until = change['xaxis.range[1]'];
      if (from === undefined || until === undefined) return;
      const asUtc = (value) => (typeof value === 'number' ? value : Date.parse(`${String(value).replace(' ', 'T')}Z`));
      this.goTo([asUtc(from), asUtc(until)]);
    });
  }

  goTo(span, isFollowing = false) {
    this.span = span;
    this.isFollowing = isFollowing;
    if (!isFollowing) this.keepInAddress();
    clearTimeout(this.timer);
    this.timer = setTimeout(() => this.draw(), DEBOUNCE_MS);
    for (const listener of this.listeners) listener(span);
  }

  keepInAddress() {
    const address = new URL(location.href);
    address.searchParams.set('span', spanText(...this.span));
    window.history.replaceState(null, '', address);
  }

  follow() {
    if (!this.isFollowing || Date.now() - this.drawnMs < FOLLOW_EVERY_MS) return;
    const now = serverNowMs();
    this.goTo([now - (this.span[1] - this.span[0]), now], true);
  }

  step(way) {
    const changes = { earlier: { move: -0.5 }, later: { move: 0.5 }, closer: { scale: 0.5 }, wider: { scale: 2 } };
    this.goTo(changedSpan(this.span, changes[way], serverNowMs()));
  }
}

/** Draws the history under `root`; gives it back so that other views share its span. */
function startHistory(root) {
  const view = new History(root);
  view.draw();
  for (const way of root.querySelectorAll('[data-way]')) {
    way.addEventListener('click', (event) => {
      event.preventDefault();
      view.step(way.dataset.way);
    });
  }
  onChange((changed) => {
    if ('all' in changed || 'alarm' in changed || 'logbook' in changed || (changed.tap && (changed.tap.length === 0 || changed.tap.includes(view.tap)))) view.follow();
  });
  window.matchMedia('(prefers-color-scheme: dark)').addEventListener('change', () => view.answer && view.show(view.answer));
  return view;
}

const root = document.querySelector('[data-history]');
if (root) {
  const view = startHistory(root);
  const trail = document.querySelector('[data-trail]');
  if (trail) startTrail(trail, view);
}
