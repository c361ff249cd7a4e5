import assert from 'node:assert/strict';
import { test } from 'node:test';
import { doubtfulPlaces, envelope, rangeOf, runsOf, timesOf, valuesOf } from '../../labmon/static/labmon/js/runs.js';

const series = { x0_ms: 0, dx_ms: 10, scale: 100, mean: [100, 200, null, 300], min: [90, 190, null, 290], max: [110, 210, null, 310] };

test('runs stop at gaps', () => {
  assert.deepEqual(runsOf([1, 2, null, 3]), [[0, 2], [3, 4]]);
  assert.deepEqual(runsOf([null, null]), []);
  assert.deepEqual(runsOf([]), []);
});

test('the envelope is one closed polygon a run, never across a gap', () => {
  const { x, y } = envelope(series);
  const first = x.indexOf(null);
  assert.deepEqual(x.slice(0, first), [5, 15, 15, 5, 5]);
  assert.deepEqual(y.slice(0, first), [1.1, 2.1, 1.9, 0.9, 1.1]);
  assert.equal(y[first], null);
  const rest = x.slice(first + 1, -1);
  assert.ok(rest.every((time) => time >= 30 && time <= 40));
  assert.equal(rest[0], rest.at(-1));
});

test('values and times', () => {
  assert.deepEqual(valuesOf(series, 'mean'), [1, 2, null, 3]);
  assert.deepEqual(timesOf(series), [5, 15, 25, 35]);
});

test('the range holds the envelope and the limits', () => {
  const [low, high] = rangeOf(series, [0.5]);
  assert.ok(low < 0.5 && high > 3.1);
  assert.equal(rangeOf({ ...series, min: [null], max: [null] }), null);
});

test('doubt is known where there is a value only', () => {
  assert.deepEqual(doubtfulPlaces({ ...series, trusted: [100, 20, 0, null] }), [false, true, false, false]);
});
