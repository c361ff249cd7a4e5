import assert from 'node:assert/strict';
import { test } from 'node:test';
import { ageText, angleFromEr, changedSpan, erFromAngle, numberText, parseSpan, spanText } from '../../labmon/static/labmon/js/format.js';

const plain = (text) => text.replaceAll('\u00a0', ' ');

test('numbers say what present.py says', () => {
  assert.equal(plain(numberText(-0.61, 1, 'dB', { signed: true })), '−0.6 dB');
  assert.equal(plain(numberText(41.23, 1, 'dB', { sign: '≥' })), '≥ 41.2 dB');
  assert.equal(numberText(NaN, 1), '–');
  assert.equal(numberText(-0.01, 1, '°', { signed: true }), '0.0°');
});

test('ages say what present.py says', () => {
  const ages = [[0, '0 s'], [59.9, '59 s'], [60, '1 min'], [6240, '1 h 44'], [3661, '1 h 01'], [277200, '3 d 5 h'], [-5, '0 s']];
  for (const [seconds, text] of ages) assert.equal(plain(ageText(seconds)), text);
  assert.equal(ageText(null), 'never');
});

test('20 dB is 2 atan 0.1 on the sphere, and back', () => {
  assert.ok(Math.abs(angleFromEr(20) - 11.4212) < 1e-4);
  assert.ok(Math.abs(erFromAngle(angleFromEr(33.3)) - 33.3) < 1e-9);
  assert.ok(Math.abs(angleFromEr(0) - 90) < 1e-9);
});

test('a span goes to text and back', () => {
  const span = [Date.UTC(2031, 2, 4), Date.UTC(2031, 2, 5)];
  assert.equal(spanText(...span), '2031-03-04T00:00:00Z/2031-03-05T00:00:00Z');
  assert.deepEqual(parseSpan(spanText(...span)), span);
  assert.equal(parseSpan('yesterday'), null);
  assert.equal(parseSpan('2031-03-05T00:00:00Z/2031-03-04T00:00:00Z'), null);
});

test('spans move and scale about their middle, and never past the latest', () => {
  assert.deepEqual(changedSpan([0, 100_000], { scale: 0.5 }, 1e9), [25_000, 75_000]);
  assert.deepEqual(changedSpan([0, 100_000], { move: 0.5 }, 1e9), [50_000, 150_000]);
  assert.deepEqual(changedSpan([0, 100_000], { move: 0.5 }, 120_000), [20_000, 120_000]);
});
