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

for (const form of document.querySelectorAll('form[data-limits]')) follow(form);
