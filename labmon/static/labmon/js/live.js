// What changed, by socket; when the socket is down, the page asks every 10 s instead. Messages may be lost: whoever
// listens fetches the truth by HTTP.

import { ageText } from './format.js';

const DEAD_AFTER_MS = 12_000;
const ASK_EVERY_MS = 10_000;
const LONGEST_WAIT_MS = 30_000;

const listeners = new Set();
const wantDroppers = [];
const clock = { skewMs: Number(document.documentElement.dataset.serverNow || Date.now()) - Date.now() };
let socket = null;
let lastHeardMs = Date.now();
let lastTruthMs = Date.now();
let waitMs = 1000;
let isStill = false;
let missedWhileStill = false;
let signedOut = false;

/** The server's time, ms. */
export function serverNowMs() {
  return Date.now() + clock.skewMs;
}

/** `listener(changed)` is called with a map of kind to ids; `{all: []}` when anything may have changed. */
export function onChange(listener) {
  listeners.add(listener);
}

/** A page tells that it has just shown the truth. */
export function noteTruth() {
  lastTruthMs = Date.now();
}

/** `dropWant` is called when a person stands the page still: it forgets a refresh that waits, and says whether there was one. */
export function onStandStill(dropWant) {
  wantDroppers.push(dropWant);
}

function tell(changed) {
  const isAlarm = 'alarm' in changed || 'all' in changed;
  if (isStill && !isAlarm) {
    missedWhileStill = true;
    return;
  }
  for (const listener of listeners) listener(changed);
}

function connect() {
  const address = new URL(document.documentElement.dataset.live, location.href);
  address.protocol = location.protocol === 'https:' ? 'wss:' : 'ws:';
  socket = new WebSocket(address);
  socket.addEventListener('open', () => {
    waitMs = 1000;
    lastHeardMs = Date.now();
    tell({ all: [] });
  });
  socket.addEventListener('message', (event) => {
    lastHeardMs = Date.now();
    const message = JSON.parse(event.data);
    if (message.now_ms) clock.skewMs = message.now_ms - Date.now();
    if (message.changed) tell(message.changed);
  });
  socket.addEventListener('close', (event) => {
    socket = null;
    if (event.code === 4401) {
      signedOut = true;
      showPulse();
      return;
    }
    setTimeout(connect, waitMs * (0.5 + Math.random()));
    waitMs = Math.min(waitMs * 2, LONGEST_WAIT_MS);
  });
}

function isConnected() {
  return socket !== null && socket.readyState === WebSocket.OPEN && Date.now() - lastHeardMs < DEAD_AFTER_MS;
}

function watchSocket() {
  if (socket && socket.readyState === WebSocket.OPEN && Date.now() - lastHeardMs > DEAD_AFTER_MS) socket.close(4000);
  if (!isConnected() && !signedOut && Date.now() - lastTruthMs > ASK_EVERY_MS) {
    lastTruthMs = Date.now();
    tell({ all: [] });
  }
}

function pulseWords() {
  const age = ageText((Date.now() - lastTruthMs) / 1000);
  if (signedOut) return 'Signed out. Sign in again to see newer readings.';
  if (isStill) return `Standing still; readings as of ${age} ago. Alarms still arrive.`;
  if (isConnected()) return `Live. Shown as of ${age} ago.`;
  return `Connection lost. Asking every 10 s; shown as of ${age} ago.`;
}

function showPulse() {
  const pulse = document.getElementById('pulse');
  if (!pulse) return;
  const words = document.getElementById('pulse-words');
  const said = pulseWords();
  if (words.textContent !== said) words.textContent = said;
  pulse.classList.toggle('is-lost', signedOut || (!isConnected() && !isStill));
}

/** Ages on the page follow the page's own clock, so they grow even when nothing arrives. */
export function showAges(root = document) {
  for (const element of root.querySelectorAll('[data-at]')) {
    const said = ageText((serverNowMs() - Number(element.dataset.at)) / 1000);
    if (element.textContent !== said) element.textContent = said;
  }
}

function offerStandStill() {
  const button = document.getElementById('stand-still');
  if (!button) return;
  button.hidden = false;
  button.addEventListener('click', () => {
    isStill = !isStill;
    button.setAttribute('aria-pressed', String(isStill));
    button.textContent = isStill ? 'Move again' : 'Stand still';
    if (!isStill && missedWhileStill) tell({ all: [] });
    missedWhileStill = isStill && wantDroppers.map((dropWant) => dropWant()).includes(true);
    showPulse();
  });
}

/** Starts socket, age clock and the button; once a page. */
export function start() {
  if (!document.documentElement.dataset.live) return;
  offerStandStill();
  connect();
  setInterval(() => {
    watchSocket();
    showPulse();
    if (!isStill) showAges();
  }, 1000);
}
