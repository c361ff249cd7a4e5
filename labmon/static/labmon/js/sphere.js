// Geometry of the Poincaré sphere for drawing. Pure: unit vectors [s1, s2, s3], angles in degrees.

const DEGREE = Math.PI / 180;
const dot = (a, b) => a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
const cross = (a, b) => [a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]];
const scaled = (a, by) => a.map((part) => part * by);
const unit = (a) => scaled(a, 1 / Math.hypot(...a));

/** Angle between two states, steady for small ones. */
export function angleBetween(a, b) {
  return Math.atan2(Math.hypot(...cross(a, b)), dot(a, b)) / DEGREE;
}

/** At a state, the directions in which azimuth and ellipticity grow (at a pole: two fixed ones). */
export function directionsAt(state) {
  const away = Math.hypot(state[0], state[1]);
  const alongAzimuth = away < 1e-9 ? [0, 1, 0] : [-state[1] / away, state[0] / away, 0];
  return [alongAzimuth, unit(cross(state, alongAzimuth))];
}

/** Where a state stands on the disc around `centre`: distance from the middle is the angle on the sphere, degrees. */
export function onDisc(state, centre) {
  const [alongAzimuth, alongEllipticity] = directionsAt(centre);
  const x = dot(state, alongAzimuth);
  const y = dot(state, alongEllipticity);
  const length = Math.hypot(x, y);
  const angle = angleBetween(state, centre);
  return length < 1e-12 ? [angle < 90 ? 0 : angle, 0] : [(angle * x) / length, (angle * y) / length];
}

/** Seen from a direction: x right, y up, z towards the eye. */
export function seenFrom(state, azimuthDeg, heightDeg) {
  const [ca, sa] = [Math.cos(azimuthDeg * DEGREE), Math.sin(azimuthDeg * DEGREE)];
  const [ch, sh] = [Math.cos(heightDeg * DEGREE), Math.sin(heightDeg * DEGREE)];
  const towards = ca * state[0] + sa * state[1];
  return [-sa * state[0] + ca * state[1], -sh * towards + ch * state[2], ch * towards + sh * state[2]];
}

/** Azimuth ψ (−90…90) and ellipticity χ (−45…45) of the polarization ellipse, degrees. */
export function ellipseAngles(state) {
  return [Math.atan2(state[1], state[0]) / DEGREE / 2, Math.atan2(state[2], Math.hypot(state[0], state[1])) / DEGREE / 2];
}

/** A circle of `angleDeg` around a state, as `count` states, closed. */
export function circleAround(centre, angleDeg, count = 90) {
  const [first, second] = directionsAt(centre);
  const [c, s] = [Math.cos(angleDeg * DEGREE), Math.sin(angleDeg * DEGREE)];
  return Array.from({ length: count + 1 }, (_, index) => {
    const turn = (2 * Math.PI * index) / count;
    return centre.map((part, axis) => c * part + s * (Math.cos(turn) * first[axis] + Math.sin(turn) * second[axis]));
  });
}
