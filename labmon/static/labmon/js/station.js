// The station page: history, and for Stokes taps the trail that shares its span.

import { startHistory } from './history.js';
import { startTrail } from './trail.js';

const root = document.querySelector('[data-history]');
if (root) {
  const history = startHistory(root);
  const trail = document.querySelector('[data-trail]');
  if (trail) startTrail(trail, history);
}
