// The proposed limit over the tap's last 30 days: a line that is dragged or moved by arrow keys, and the calls it would have made
// as spans. It only writes into the form's alarm field: what asks for the rehearsal is the form's own input event.

import { numberText, spanText } from './format.js';
import { serverNowMs } from './live.js';
import { envelope, rangeOf, timesOf, valuesOf } from './runs.js';

const DAYS_MS = 30 * 86_400_000;
const CONFIG = { displaylogo: false, displayModeBar: false, showSendToCloud: false, plotlyServerURL: '', topojsonURL: '',
  responsive: true, scrollZoom: false, doubleClick: false, staticPlot: true };
const STEPS = { er_db: 0.1, angle_deg: 0.1, dop: 0.001, power_w: 0.05 };
const UNITS = { er_db: 'dB', angle_deg: '°', dop: '', power_w: 'dBm' };
const NAMES = { er_db: 'extinction ratio (dB)', angle_deg: 'angle (°)', dop: 'degree of polarization', power_w: 'power (dBm)' };
const TOP = 10;
const BOTTOM = 46;

function colours() {
  const style = getComputedStyle(document.documentElement);
  const of = (name) => style.getPropertyValue(name).trim();
  return { ink: of('--ink'), soft: of('--soft'), line: of('--line'), sheet: of('--sheet'), below: of('--below'), thin: of('--thin'),
    band: of('--band'), rule: of('--rule') };
}

/** The level in the form (its own unit) as it is drawn: power stands in dBm. */
function drawnOf(quantity, value) {
  return quantity === 'power_w' ? 10 * Math.log10(value * 1000) : value;
}

/** The inverse, as text for the field. */
function typedOf(quantity, drawn) {
  if (quantity === 'power_w') return (10 ** (drawn / 10) / 1000).toPrecision(3);
  return drawn.toFixed(quantity === 'dop' ? 3 : 1);
}

class Overlay {
  constructor(root, form) {
    this.root = root;
    this.form = form;
    this.plot = root.querySelector('.plot');
    this.handle = root.querySelector('.level');
    this.words = root.querySelector('[data-overlay-words]');
    this.spans = [];
    this.asked = 0;
    for (const name of ['tap', 'quantity']) form.elements[name].addEventListener('change', () => this.fetch());
    form.addEventListener('input', (event) => event.target.name === 'alarm' && this.place());
    form.addEventListener('rehearsed', () => this.takeSpans());
    this.handle.addEventListener('pointerdown', (event) => this.grab(event));
    this.handle.addEventListener('keydown', (event) => this.step(event));
    window.matchMedia('(prefers-color-scheme: dark)').addEventListener('change', () => this.draw());
    window.addEventListener('resize', () => this.place());
  }

  get quantity() {
    return this.form.elements.quantity.value;
  }

  /** What is drawn: a derived quantity has no curve of its own and stands on the extinction ratio. */
  get shown() {
    return this.quantity in STEPS ? this.quantity : 'er_db';
  }

  get isDragged() {
    return this.quantity in STEPS;
  }

  async fetch() {
    this.asked += 1;
    const { asked } = this;
    const [station, tap] = this.form.elements.tap.value.split('/');
    if (!tap) return;
    const now = serverNowMs();
    const span = spanText(now - DAYS_MS, now);
    const answer = await fetch(`/stations/${station}/taps/${tap}/history.json?quantity=${this.shown}&points=900&span=${span}`).catch(() => null);
    if (asked !== this.asked) return;
    this.root.hidden = !(answer && answer.ok);
    if (this.root.hidden) return;
    const body = await answer.json();
    if (asked !== this.asked) return;
    this.series = body.series;
    this.span = body.span_ms;
    const present = this.series.limits.filter((limit) => limit.until_ms === null && limit.judged === this.quantity);
    this.present = present.length ? present[present.length - 1].alarm : null;
    const field = this.form.elements.alarm;
    if (field.value === '' && this.present !== null) {
      field.value = typedOf(this.quantity, this.present);
      field.dispatchEvent(new Event('input', { bubbles: true }));
    }
    this.spans = [];
    this.takeSpans();
    this.draw();
  }

  takeSpans() {
    const said = this.form.querySelector('#rehearsal [data-spans]');
    this.spans = said ? JSON.parse(said.dataset.spans) : [];
    this.draw();
  }

  /** The level as drawn; where none is typed, low in the picture (for an angle high): a place to begin. */
  get level() {
    const typed = Number(this.form.elements.alarm.value.replace(',', '.'));
    if (this.form.elements.alarm.value.trim() !== '' && Number.isFinite(typed)) {
      const drawn = drawnOf(this.quantity, typed);
      if (Number.isFinite(drawn)) return drawn;
    }
    const [low, high] = this.range;
    return low + (high - low) * (this.quantity === 'angle_deg' ? 0.8 : 0.2);
  }

  draw() {
    if (!this.series || this.root.hidden) return;
    const paint = colours();
    const typed = Number(this.form.elements.alarm.value.replace(',', '.'));
    const also = this.isDragged && this.form.elements.alarm.value !== '' && Number.isFinite(drawnOf(this.quantity, typed)) ? [drawnOf(this.quantity, typed)] : [];
    this.range = rangeOf(this.series, [...also, ...this.series.limits.map((limit) => limit.alarm)]) || [0, 1];
    const width = this.plot.clientWidth;
    const isNarrow = width < 560;
    this.left = isNarrow ? 40 : 58;
    this.height = isNarrow ? 220 : 300;
    const band = envelope(this.series);
    const axis = { color: paint.soft, gridcolor: paint.line, linecolor: paint.rule, zeroline: false, fixedrange: true };
    const traces = [
      { x: band.x, y: band.y, type: 'scatter', mode: 'lines', fill: 'toself', fillcolor: paint.band, line: { width: 0.5, color: paint.rule } },
      { x: timesOf(this.series), y: valuesOf(this.series, 'mean'), type: 'scatter', mode: 'lines', connectgaps: false, line: { color: paint.ink, width: 1.4 } },
      ...this.series.limits.filter((limit) => limit.until_ms === null).map((limit) => ({ x: this.span, y: [limit.alarm, limit.alarm], type: 'scatter',
        mode: 'lines', line: { color: paint.ink, width: 2 } })),
      ...['warning', 'alarm'].map((level) => this.spanTrace(level, level === 'alarm' ? paint.below : paint.thin)),
    ];
    const layout = { paper_bgcolor: paint.sheet, plot_bgcolor: paint.sheet, showlegend: false, height: this.height,
      font: { family: '"DejaVu Sans Condensed", "Noto Sans", "DejaVu Sans", sans-serif', size: 12, color: paint.ink },
      margin: { l: this.left, r: 14, t: TOP, b: BOTTOM, autoexpand: false },
      xaxis: { ...axis, type: 'date', range: this.span, ticks: 'outside', nticks: isNarrow ? 4 : 8 },
      yaxis: { ...axis, range: this.range, title: { text: isNarrow ? '' : NAMES[this.shown] } } };
    this.plot.style.height = `${this.height}px`;
    window.Plotly.react(this.plot, traces, layout, CONFIG).then(() => { this.root.dataset.drawn = `${this.spans.length}`; });
    this.words.textContent = this.isDragged
      ? 'Drag the dashed line, or move it with the arrow keys; the marks at the foot are the calls it would have made. The full line is the limit in force.'
      : 'The marks at the foot are the calls it would have made.';
    this.place();
  }

  /** Calls as thick lines at the foot of the picture; a short one is still a dot. */
  spanTrace(level, colour) {
    const y = this.range[0] + (this.range[1] - this.range[0]) * 0.03;
    const x = [];
    const heights = [];
    for (const [from, until, own] of this.spans) {
      if (own !== level) continue;
      x.push(from, until, null);
      heights.push(y, y, null);
    }
    return { x, y: heights, type: 'scatter', mode: 'lines+markers', connectgaps: false, line: { color: colour, width: 7 }, marker: { size: 7, color: colour } };
  }

  place() {
    this.handle.hidden = !this.isDragged || !this.range;
    if (this.handle.hidden) return;
    const [low, high] = this.range;
    const { level } = this;
    const inside = this.height - TOP - BOTTOM;
    const y = TOP + (1 - (Math.min(Math.max(level, low), high) - low) / (high - low)) * inside;
    this.handle.style.top = `${y}px`;
    this.handle.style.left = `${this.left}px`;
    this.handle.setAttribute('aria-valuemin', low.toFixed(2));
    this.handle.setAttribute('aria-valuemax', high.toFixed(2));
    this.handle.setAttribute('aria-valuenow', level.toFixed(3));
    this.handle.setAttribute('aria-valuetext', numberText(level, this.quantity === 'dop' ? 3 : 1, UNITS[this.quantity]));
    this.handle.dataset.words = this.handle.getAttribute('aria-valuetext');
  }

  write(level) {
    const field = this.form.elements.alarm;
    field.value = typedOf(this.quantity, level);
    field.dispatchEvent(new Event('input', { bubbles: true }));
  }

  grab(event) {
    event.preventDefault();
    this.handle.focus();
    this.handle.setPointerCapture(event.pointerId);
    const move = (moved) => {
      const box = this.plot.getBoundingClientRect();
      const share = 1 - (moved.clientY - box.top - TOP) / (this.height - TOP - BOTTOM);
      const [low, high] = this.range;
      const step = STEPS[this.quantity];
      const level = Math.round((low + Math.min(Math.max(share, 0), 1) * (high - low)) / step) * step;
      this.write(level);
    };
    const drop = () => {
      this.handle.removeEventListener('pointermove', move);
      this.draw();
    };
    this.handle.addEventListener('pointermove', move);
    this.handle.addEventListener('pointerup', drop, { once: true });
    this.handle.addEventListener('pointercancel', drop, { once: true });
  }

  step(event) {
    const ways = { ArrowUp: 1, ArrowRight: 1, ArrowDown: -1, ArrowLeft: -1, PageUp: 10, PageDown: -10 };
    if (!(event.key in ways)) return;
    event.preventDefault();
    this.write(this.level + ways[event.key] * (event.shiftKey ? 10 : 1) * STEPS[this.quantity]);
  }
}

const root = document.querySelector('[data-overlay]');
const form = root?.closest('form');
if (form) new Overlay(root, form).fetch();
