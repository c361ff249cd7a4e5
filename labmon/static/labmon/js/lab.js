// The lab page: rows and rails are patched from /lab.json, so that 200 benches cost little.

import { noteTruth, onChange, onStandStill, serverNowMs, showAges } from './live.js';

const SVG = 'http://www.w3.org/2000/svg';
const waiting = document.getElementById('waiting');
const body = document.getElementById('bench-rows');
const rails = document.getElementById('rails');
const sentence = document.getElementById('sentence');
const said = document.getElementById('said');
const SHORTEST_GAP_MS = 1500;
const COURSE_EVERY_MS = 300_000;
let lastCourseMs = serverNowMs();
let isRunning = false;
let isWanted = false;
let isHurried = false;
let timer = null;

function setText(element, text) {
  if (element.textContent !== text) element.textContent = text;
}

/** The tick or shape on the bench's own rail, and the day's course behind the first part of the path. */
function patchMark(cell, fresh) {
  const path = cell.querySelector('.spark path');
  const drawn = path.getAttribute('d');
  const second = drawn.indexOf('M', 1);
  path.setAttribute('d', fresh.tick + (fresh.course ?? (second < 0 ? '' : drawn.slice(second))));
  let svg = cell.querySelector('.rail-own');
  if (!fresh.shape) {
    svg?.remove();
    return;
  }
  if (!svg) {
    svg = document.createElementNS(SVG, 'svg');
    svg.setAttribute('class', 'rail-own');
    svg.setAttribute('aria-hidden', 'true');
    svg.append(document.createElementNS(SVG, 'use'));
    svg.firstChild.setAttribute('y', '13');
    cell.prepend(svg);
  }
  svg.firstChild.setAttribute('href', fresh.shape);
  svg.firstChild.setAttribute('x', fresh.x);
}

function patchRow(row, fresh) {
  const [, state, er, margin, course, heard] = row.children;
  setText(state, fresh.word);
  state.className = `state ${fresh.standing}`;
  setText(er, fresh.value);
  er.className = `num er${fresh.is_doubtful ? ' hollow' : ''}`;
  setText(margin, fresh.margin);
  margin.className = `num margin${fresh.is_doubtful ? ' hollow' : ''}`;
  patchMark(course, fresh);
  row.classList.toggle('is-waiting', fresh.is_waiting);
  if (fresh.heard_ms === null) heard.removeAttribute('data-at');
  else heard.dataset.at = fresh.heard_ms;
}

function patch(fresh) {
  setText(sentence, fresh.sentence);
  if (said.textContent !== fresh.sentence) said.textContent = fresh.sentence;
  document.title = fresh.title;
  if (!rails.contains(document.activeElement) && rails.innerHTML !== fresh.rails) rails.innerHTML = fresh.rails;
  if (!waiting.contains(document.activeElement) && waiting.innerHTML.trim() !== fresh.waiting.trim()) waiting.innerHTML = fresh.waiting;
  const rows = new Map([...body.children].map((row) => [row.dataset.station, row]));
  if (fresh.rows.some((item) => !rows.has(item.station)) || fresh.rows.length !== rows.size) {
    location.reload();
    return;
  }
  const isOrdered = fresh.rows.every((item, index) => body.children[index] === rows.get(item.station));
  for (const item of fresh.rows) patchRow(rows.get(item.station), item);
  if (!isOrdered && !body.contains(document.activeElement) && !body.matches(':hover')) {
    body.append(...fresh.rows.map((item) => rows.get(item.station)));
  }
  showAges(body);
  noteTruth();
}

async function refresh() {
  isRunning = true;
  isWanted = false;
  const withCourse = serverNowMs() - lastCourseMs > COURSE_EVERY_MS;
  try {
    const answer = await fetch(withCourse ? '/lab.json?course=1' : '/lab.json', { redirect: 'error' });
    if (answer.ok) {
      patch(await answer.json());
      if (withCourse) lastCourseMs = serverNowMs();
    }
  } catch {
    // The pulse line shows the age; the next change or the next 10 s try again.
  }
  isRunning = false;
  if (isHurried) {
    isHurried = false;
    refresh();
    return;
  }
  timer = setTimeout(() => {
    timer = null;
    if (isWanted) refresh();
  }, SHORTEST_GAP_MS);
}

if (body) onStandStill(() => {
  const wasWanted = isWanted;
  isWanted = false;
  return wasWanted;
});

if (body) onChange((changed) => {
  const isUrgent = 'alarm' in changed || 'all' in changed;
  if (isRunning) {
    isWanted = true;
    isHurried ||= isUrgent;
  } else if (isUrgent || timer === null) {
    clearTimeout(timer);
    timer = null;
    refresh();
  } else isWanted = true;
});
