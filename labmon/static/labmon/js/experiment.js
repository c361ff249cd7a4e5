// The limits form: what is typed in dB is shown in degrees beside it, and the other way round.

import { angleFromEr, erFromAngle, numberText } from './format.js';

function twinText(quantity, typed) {
  const value = Number(typed.replace(',', '.'));
  if (typed.trim() === '' || !Number.isFinite(value)) return '';
  if (quantity === 'er_db') return `= ${numberText(angleFromEr(value), 2, '°')} on the sphere`;
  if (quantity === 'angle_deg') return value > 0 && value < 180 ? `= ${numberText(erFromAngle(value), 2, 'dB')} extinction ratio` : '';
  if (quantity === 'power_w' && value > 0) return `= ${numberText(10 * Math.log10(value * 1000), 2, 'dBm')}`;
  return '';
}

function follow(form) {
  const quantity = form.elements.quantity;
  const show = () => {
    for (const name of ['alarm', 'warning']) {
      const twin = form.querySelector(`[data-twin="${name}"]`);
      if (twin) twin.textContent = twinText(quantity.value, form.elements[name].value);
    }
  };
  form.addEventListener('input', show);
  form.addEventListener('change', show);
  show();
}

/** Fills in the delays and the deadband that suit the chosen quantity, with the reason; what a person typed stays. */
function propose(form) {
  const proposals = JSON.parse(form.dataset.proposals || '{}');
  const why = form.querySelector('[data-why-proposed]');
  const filled = {};
  for (const name of FILLED) filled[name] = form.elements[name]?.value;
  form.elements.quantity.addEventListener('change', () => {
    const proposal = proposals[form.elements.quantity.value];
    if (!proposal) return;
    for (const name of FILLED) {
      const field = form.elements[name];
      if (!field || field.value !== filled[name]) continue;
      field.value = proposal[name] ?? '';
      filled[name] = field.value;
    }
    if (why) why.textContent = proposal.why;
  });
}

const FILLED = ['on_delay_s', 'off_delay_s', 'deadband', 'window_s'];
const QUIET_MS = 400;

/** Asks anew what the limit would have done, when nothing was typed for a moment; an older answer never covers a newer one. */
function rehearse(form) {
  const button = form.querySelector('[data-rehearse]');
  const shown = form.querySelector('#rehearsal');
  if (!button || !shown) return;
  let timer = 0;
  let asked = null;
  const ask = async () => {
    asked?.abort();
    asked = new AbortController();
    try {
      const answer = await fetch(button.formAction, {
        method: 'POST', body: new FormData(form), headers: { 'X-Labmon-Part': '1' }, signal: asked.signal,
      });
      if (answer.ok || answer.status === 422) {
        shown.innerHTML = await answer.text();
        form.dispatchEvent(new CustomEvent('rehearsed'));
      }
    } catch {
      // Typed on, or the server is away: the button still asks.
    }
  };
  form.addEventListener('input', (event) => {
    if (event.target.name === 'reason') return;
    clearTimeout(timer);
    timer = setTimeout(ask, QUIET_MS);
  });
}

for (const form of document.querySelectorAll('form[data-limits]')) {
  propose(form);
  follow(form);
  rehearse(form);
}
