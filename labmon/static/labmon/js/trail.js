// The way of the state of polarization: three drawings of one trail on a plain canvas, coloured by time.

import { spanText, timeText } from './format.js';
import { angleBetween, circleAround, ellipseAngles, onDisc, seenFrom } from './sphere.js';

// Cividis (Nuñez, Anderton, Renslow, PLoS ONE 13(7), 2018), ten steps.
const CIVIDIS = ['#00224e', '#123570', '#3b496c', '#575d6d', '#707173', '#8a8678', '#a59c74', '#c3b369', '#e1cc55', '#fee838'];

function rampColours(isDark) {
  return isDark ? CIVIDIS.slice(3) : CIVIDIS.slice(0, 8);
}

function paintOf(element) {
  const style = getComputedStyle(element);
  const of = (name) => style.getPropertyValue(name).trim();
  return { ink: of('--ink'), soft: of('--soft'), line: of('--line'), rule: of('--rule'), below: of('--below') };
}

class Trail {
  constructor(root) {
    this.root = root;
    this.canvas = root.querySelector('canvas.sky');
    this.ramp = root.querySelector('canvas.ramp');
    this.words = root.querySelector('[data-sentence]');
    this.drawing = 'disc';
    this.eye = [30, 20];
    this.dark = window.matchMedia('(prefers-color-scheme: dark)');
    this.dark.addEventListener('change', () => this.draw());
    new ResizeObserver(() => this.draw()).observe(this.canvas);
    for (const input of root.querySelectorAll('input[name=drawing]')) {
      input.addEventListener('change', () => {
        this.drawing = input.value;
        this.draw();
      });
    }
    this.turnable();
  }

  async fetch(span) {
    const asked = Symbol('asked');
    this.asked = asked;
    try {
      const answer = await fetch(`${this.root.dataset.url}?span=${spanText(...span)}`);
      if (!answer.ok) throw new Error(`The server answered ${answer.status}.`);
      const fresh = await answer.json();
      if (this.asked === asked) this.take(fresh);
    } catch (error) {
      this.words.textContent = `The trail could not be fetched: ${error.message} Reload the page.`;
    }
  }

  take(answer) {
    const { s1, s2, s3, scale } = answer;
    this.states = s1.map((value, index) => (value === null ? null : [value / scale, s2[index] / scale, s3[index] / scale]));
    this.wanted = answer.wanted;
    this.tolerance = answer.tolerance_deg;
    this.words.textContent = answer.sentence;
    this.canvas.setAttribute('aria-label', answer.sentence);
    this.root.querySelector('[data-first]').textContent = timeText(answer.span_ms[0]);
    this.root.querySelector('[data-last]').textContent = timeText(answer.span_ms[1]);
    this.root.dataset.count = String(this.states.filter(Boolean).length);
    this.draw();
  }

  draw() {
    const context = this.sized();
    if (!context) return;
    const paint = paintOf(this.root);
    const size = this.canvas.clientWidth;
    context.clearRect(0, 0, size, size);
    context.font = '12px "DejaVu Sans Condensed", "Noto Sans", "DejaVu Sans", sans-serif';
    this.drawRamp();
    if (!this.states) return;
    if (this.drawing === 'disc') this.drawDisc(context, size, paint);
    else if (this.drawing === 'sphere') this.drawSphere(context, size, paint);
    else this.drawMap(context, size, paint);
  }

  sized() {
    const ratio = window.devicePixelRatio || 1;
    const width = Math.round(this.canvas.clientWidth * ratio);
    if (width === 0) return null;
    if (this.canvas.width !== width) this.canvas.width = this.canvas.height = width;
    const context = this.canvas.getContext('2d');
    context.setTransform(ratio, 0, 0, ratio, 0, 0);
    return context;
  }

  drawRamp() {
    this.ramp.width = 256;
    this.ramp.height = 1;
    const context = this.ramp.getContext('2d');
    const steps = rampColours(this.dark.matches);
    const shade = context.createLinearGradient(0, 0, 256, 0);
    steps.forEach((colour, index) => shade.addColorStop(index / (steps.length - 1), colour));
    context.fillStyle = shade;
    context.fillRect(0, 0, 256, 1);
  }

  /** Draws the trail through `place(state) -> [x, y, isFaded]` in pieces of one colour each. */
  drawTrail(context, place, jump) {
    const steps = rampColours(this.dark.matches);
    const pieces = steps.length * 6;
    const each = Math.max(1, Math.ceil(this.states.length / pieces));
    context.lineWidth = 1.4;
    for (let start = 0; start < this.states.length; start += each) {
      const share = start / this.states.length;
      context.strokeStyle = steps[Math.min(steps.length - 1, Math.floor(share * steps.length))];
      for (const isFar of [true, false]) {
        context.globalAlpha = isFar ? 0.3 : 1;
        context.beginPath();
        let previous = null;
        for (const state of this.states.slice(start, start + each + 1)) {
          const spot = state && place(state);
          if (spot && Boolean(spot[2]) === isFar) {
            if (previous && Math.hypot(spot[0] - previous[0], spot[1] - previous[1]) < jump) context.lineTo(spot[0], spot[1]);
            else {
              context.moveTo(spot[0], spot[1]);
              context.lineTo(spot[0] + 0.8, spot[1]);
            }
            previous = spot;
          } else previous = null;
        }
        context.stroke();
      }
    }
    context.globalAlpha = 1;
  }

  drawNow(context, place, paint) {
    const state = this.states.findLast(Boolean);
    if (!state) return;
    const [x, y] = place(state);
    context.strokeStyle = paint.ink;
    context.lineWidth = 2.5;
    context.beginPath();
    context.arc(x, y, 6, 0, 2 * Math.PI);
    context.stroke();
    context.fillStyle = paint.ink;
    context.fillText('last', x + 9, y + 4);
  }

  outline(context, spots, colour, { dash = [], width = 1, jump = Infinity } = {}) {
    context.strokeStyle = colour;
    context.lineWidth = width;
    context.setLineDash(dash);
    context.beginPath();
    let previous = null;
    for (const spot of spots) {
      if (previous && Math.hypot(spot[0] - previous[0], spot[1] - previous[1]) < jump) context.lineTo(spot[0], spot[1]);
      else context.moveTo(spot[0], spot[1]);
      previous = spot;
    }
    context.stroke();
    context.setLineDash([]);
  }

  drawDisc(context, size, paint) {
    const centre = this.wanted;
    const farthest = this.states.reduce((most, state) => (state ? Math.max(most, angleBetween(state, centre)) : most), 0);
    const wide = Math.max(farthest * 1.12, (this.tolerance ?? 0) * 1.25, 2);
    const step = [0.5, 1, 2, 5, 10, 15, 30, 45].find((one) => wide / one <= 5) ?? 45;
    const middle = size / 2;
    const scale = (size / 2 - 22) / wide;
    const place = (state) => {
      const [x, y] = onDisc(state, centre);
      return [middle + x * scale, middle - y * scale];
    };
    context.fillStyle = paint.soft;
    for (let ring = step; ring <= wide; ring += step) {
      this.outline(context, Array.from({ length: 91 }, (_, index) => [middle + ring * scale * Math.cos(index * Math.PI / 45), middle + ring * scale * Math.sin(index * Math.PI / 45)]), paint.line);
      context.fillText(`${ring}°`, middle + 4, middle - ring * scale - 3);
    }
    this.outline(context, [[18, middle], [size - 18, middle]], paint.line);
    this.outline(context, [[middle, 18], [middle, size - 18]], paint.line);
    context.fillText('azimuth +', size - 62, middle - 5);
    context.fillText('ellipticity +', middle - 74, 14);
    this.drawTrail(context, place, Infinity);
    if (this.tolerance) this.drawTolerance(context, circleAround(centre, this.tolerance).map(place), paint);
    this.drawNow(context, place, paint);
  }

  drawTolerance(context, spots, paint, jump = Infinity) {
    this.outline(context, spots, paint.below, { dash: [6, 4], width: 1.8, jump });
    const lowest = spots.reduce((low, spot) => (spot[1] > low[1] ? spot : low));
    context.fillStyle = paint.below;
    context.fillText(`limit ${this.tolerance.toFixed(1)}°`, lowest[0] + 6, lowest[1] + 14);
  }

  drawSphere(context, size, paint) {
    const middle = size / 2;
    const radius = size / 2 - 22;
    const place = (state) => {
      const [x, y, z] = seenFrom(state, ...this.eye);
      return [middle + x * radius, middle - y * radius, z < 0];
    };
    this.outline(context, Array.from({ length: 121 }, (_, index) => [middle + radius * Math.cos(index * Math.PI / 60), middle + radius * Math.sin(index * Math.PI / 60)]), paint.rule);
    for (const pole of [[1, 0, 0], [0, 1, 0], [0, 0, 1]]) {
      for (const isFar of [true, false]) {
        const spots = circleAround(pole, 90).map(place).filter((spot) => spot[2] === isFar);
        this.outline(context, spots, isFar ? paint.line : paint.rule, { jump: radius * 0.2 });
      }
    }
    context.fillStyle = paint.soft;
    for (const [name, state] of [['H', [1, 0, 0]], ['V', [-1, 0, 0]], ['+45', [0, 1, 0]], ['−45', [0, -1, 0]], ['S3+', [0, 0, 1]], ['S3−', [0, 0, -1]]]) {
      const [x, y, isFar] = place(state);
      context.globalAlpha = isFar ? 0.45 : 1;
      context.fillText(name, x + 4, y - 4);
    }
    context.globalAlpha = 1;
    this.drawTrail(context, place, Infinity);
    if (this.tolerance) this.drawTolerance(context, circleAround(this.wanted, this.tolerance).map(place), paint);
    this.drawNow(context, place, paint);
  }

  drawMap(context, size, paint) {
    const edge = 34;
    const wide = size - 2 * edge;
    const place = (state) => {
      const [psi, chi] = ellipseAngles(state);
      return [edge + ((psi + 90) / 180) * wide, size / 2 - (chi / 45) * (wide / 2)];
    };
    context.fillStyle = paint.soft;
    for (const share of [0, 0.25, 0.5, 0.75, 1]) {
      const along = edge + share * wide;
      this.outline(context, [[along, edge], [along, size - edge]], paint.line);
      this.outline(context, [[edge, along], [size - edge, along]], paint.line);
      context.fillText(`${-90 + share * 180}°`, along - 10, size - edge + 15);
      context.fillText(`${45 - share * 90}°`, 2, along + 4);
    }
    context.fillText('azimuth ψ', size / 2 - 24, size - 4);
    context.fillText('ellipticity χ', 2, edge - 14);
    this.drawTrail(context, place, wide / 2);
    if (this.tolerance) this.drawTolerance(context, circleAround(this.wanted, this.tolerance).map(place), paint, wide / 2);
    this.drawNow(context, place, paint);
  }

  turnable() {
    const turn = (right, up) => {
      this.eye = [this.eye[0] + right, Math.max(-90, Math.min(90, this.eye[1] + up))];
      if (this.drawing === 'sphere') this.draw();
    };
    this.canvas.addEventListener('pointermove', (event) => {
      if (event.buttons === 1) turn(-event.movementX * 0.5, event.movementY * 0.5);
    });
    for (const button of this.root.querySelectorAll('[data-turn]')) {
      button.addEventListener('click', () => turn(...button.dataset.turn.split(' ').map(Number)));
    }
  }
}

/** Draws the trail under `root` for the span of `history`, and again whenever that changes. */
export function startTrail(root, history) {
  const trail = new Trail(root);
  trail.fetch(history.span);
  let timer = null;
  history.listeners.push((span) => {
    clearTimeout(timer);
    timer = setTimeout(() => trail.fetch(span), 250);
  });
  return trail;
}
