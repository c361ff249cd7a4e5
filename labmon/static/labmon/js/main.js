// Every page: connection, age clock, and the live parts the page names.

import { showAges, start } from './live.js';
import { refreshOn } from './parts.js';

const { parts, taps } = document.body.dataset;
if (parts) refreshOn(parts.split(' '), taps ? { tap: taps.split(' ').map(Number) } : {});
for (const form of document.querySelectorAll('form[data-sure]')) {
  form.addEventListener('submit', (event) => {
    if (!window.confirm(form.dataset.sure)) event.preventDefault();
  });
}
showAges();
start();
