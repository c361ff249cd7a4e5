// Every page: connection, age clock, and the live parts the page names. A part is fetched anew with the page and put in
// place; one in which a person is writing is left alone.

import { noteTruth, onChange, onStandStill, showAges, start } from './live.js';

const SHORTEST_GAP_MS = 1000;
let isRunning = false;
let isWanted = false;

function isInUse(part) {
  const focused = document.activeElement;
  return part.contains(focused) && focused.matches('input, textarea, select');
}

function putInPlace(fresh) {
  for (const part of document.querySelectorAll('[data-part]')) {
    const other = fresh.getElementById(part.id);
    if (!other || isInUse(part) || part.innerHTML === other.innerHTML) continue;
    const focusedId = part.contains(document.activeElement) ? document.activeElement.id : '';
    for (const details of part.querySelectorAll('details[open][id]')) other.querySelector(`#${details.id}`)?.setAttribute('open', '');
    part.innerHTML = other.innerHTML;
    if (focusedId) document.getElementById(focusedId)?.focus();
  }
  if (document.title !== fresh.title) document.title = fresh.title;
}

async function refresh() {
  if (isRunning) {
    isWanted = true;
    return;
  }
  isRunning = true;
  isWanted = false;
  try {
    const answer = await fetch(document.body.dataset.truth || location.href, { headers: { 'X-Labmon-Part': '1' }, redirect: 'error' });
    if (answer.ok) {
      putInPlace(new DOMParser().parseFromString(await answer.text(), 'text/html'));
      noteTruth();
      showAges();
    }
  } catch {
    // The pulse line shows the age; the next change or the next 10 s try again.
  }
  setTimeout(() => {
    isRunning = false;
    if (isWanted) refresh();
  }, SHORTEST_GAP_MS);
}

onStandStill(() => {
  const wasWanted = isWanted;
  isWanted = false;
  return wasWanted;
});

/** Refreshes on changes of the given kinds; `ids` limits a kind to ids the page shows. */
function refreshOn(kinds, ids = {}) {
  onChange((changed) => {
    const hits = Object.entries(changed).some(([kind, changedIds]) => kind === 'all'
      || (kinds.includes(kind) && (!ids[kind] || changedIds.length === 0 || changedIds.some((id) => ids[kind].includes(id)))));
    if (hits) refresh();
  });
}

const { parts, taps } = document.body.dataset;
if (parts) refreshOn(parts.split(' '), taps ? { tap: taps.split(' ').map(Number) } : {});
for (const form of document.querySelectorAll('form[data-sure]')) {
  form.addEventListener('submit', (event) => {
    if (!window.confirm(form.dataset.sure)) event.preventDefault();
  });
}
showAges();
start();
