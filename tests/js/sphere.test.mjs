import assert from 'node:assert/strict';
import { test } from 'node:test';
import { angleBetween, circleAround, directionsAt, ellipseAngles, onDisc, seenFrom } from '../../labmon/static/labmon/js/sphere.js';

const near = (one, other, by = 1e-9) => assert.ok(Math.abs(one - other) < by, `${one} is not ${other}`);
const state = (psi, chi) => {
  const [a, b] = [psi, chi].map((angle) => (angle * Math.PI) / 90);
  return [Math.cos(b) * Math.cos(a), Math.cos(b) * Math.sin(a), Math.sin(b)];
};

test('azimuth 89.5 and -89.5 degrees are 2 degrees apart on the sphere', () => near(angleBetween(state(89.5, 0), state(-89.5, 0)), 2));

test('ellipse angles come back', () => {
  for (const [psi, chi] of [[9.22, -5.95], [-80, 40], [45, 0]]) {
    const [gotPsi, gotChi] = ellipseAngles(state(psi, chi));
    near(gotPsi, psi);
    near(gotChi, chi);
  }
});

test('the disc keeps the angle from its centre, azimuth to the right, ellipticity up', () => {
  const centre = state(20, 10);
  const [x, y] = onDisc(state(22, 10), centre);
  near(Math.hypot(x, y), angleBetween(state(22, 10), centre));
  assert.ok(x > 3 && Math.abs(y) < 0.2);
  assert.ok(onDisc(state(20, 12), centre)[1] > 3.9);
  assert.deepEqual(onDisc(centre, centre).map((part) => Math.round(part * 1e6)), [0, 0]);
});

test('a circle keeps its angle everywhere and the poles have directions too', () => {
  for (const centre of [state(30, 20), [0, 0, 1], [0, 0, -1]]) {
    for (const spot of circleAround(centre, 12, 24)) near(angleBetween(spot, centre), 12);
    const [first, second] = directionsAt(centre);
    near(Math.hypot(...first), 1);
    near(Math.hypot(...second), 1);
  }
});

test('turning the eye keeps lengths, and what it looks at comes nearest', () => {
  near(Math.hypot(...seenFrom(state(33, 12), 70, 15)), 1);
  near(seenFrom([1, 0, 0], 0, 0)[2], 1);
  near(seenFrom([0, 0, 1], 12, 90)[2], 1);
});
