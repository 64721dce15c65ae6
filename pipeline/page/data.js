"use strict";

/** Numbers (Float64Array) from the text that packed() in pack.py writes: base64, base 128, second differences. */
function unpacked(text, unit) {
  const bytes = Uint8Array.from(atob(text), (c) => c.charCodeAt(0));
  const values = new Float64Array(bytes.length);
  let many = 0, before = 0, last = 0;
  for (let i = 0; i < bytes.length;) {
    let folded = 0, factor = 1, byte;
    do {
      byte = bytes[i++];
      folded += (byte & 127) * factor;
      factor *= 128;
    } while (byte & 128);
    const second = folded % 2 ? -(folded + 1) / 2 : folded / 2;
    const value = second + 2 * last - before;
    before = last;
    last = value;
    values[many++] = value * unit;
  }
  return values.subarray(0, many);
}

/** A series on an even grid, read between its points along straight lines. */
class Series {
  constructor(values, start, step) {
    Object.assign(this, { values, start, step });
  }

  at(t) {
    const x = Math.min(Math.max((t - this.start) / this.step, 0), this.values.length - 1);
    const k = Math.min(Math.floor(x), this.values.length - 2);
    if (k < 0) return this.values[0];
    return this.values[k] + (x - k) * (this.values[k + 1] - this.values[k]);
  }
}

const scene = JSON.parse(document.getElementById("scene").textContent);
const travel = scene.belt && new Series(unpacked(scene.belt.travel, scene.belt.unit), scene.start, scene.belt.step);
const motion = scene.motion && scene.motion.joints.map(
  (text, j) => new Series(unpacked(text, scene.motion.units[j]), scene.motion.start, scene.motion.step));

const PHASES = ["up", "across", "down", "dwell", "up", "across", "down", "release"];

/** Joints J1 to J4 at a time, rad and mm. */
const jointsAt = (t) => (motion ? motion.map((series) => series.at(t)) : scene.arm.home);

/** Where the arm's pivots and its tip are with given joints: mm in the cell frame, and the tip's yaw. */
function pose(joints) {
  const { base, links, baseYaw, sense, offset, toolYaw, foot, lead } = scene.arm;
  const a = baseYaw + sense[0] * joints[0], b = a + sense[1] * joints[1], c = b + sense[3] * joints[3];
  const elbow = [base[0] + links[0] * Math.cos(a), base[1] + links[0] * Math.sin(a)];
  const quill = [elbow[0] + links[1] * Math.cos(b), elbow[1] + links[1] * Math.sin(b)];
  const tip = added(quill, turned(offset, c));
  return { elbow, quill, tip, yaw: c + toolYaw, z: foot + sense[2] * joints[2] + lead * sense[3] * joints[3] };
}

const added = (p, q) => [p[0] + q[0], p[1] + q[1]];
const turned = ([x, y], by) => [x * Math.cos(by) - y * Math.sin(by), x * Math.sin(by) + y * Math.cos(by)];

/** How far the belt has moved since counts 0, as x, y. */
function shift(t) {
  if (!travel) return [0, 0];
  const way = travel.at(t);
  return [way * scene.belt.heading[0], way * scene.belt.heading[1]];
}

/** What the arm does at a time: the index of its pick (-1 after the last), the phase, and when it began. */
function doing(t) {
  let low = 0, high = scene.picks.length;
  while (low < high) { // the first pick that is not over yet
    const middle = (low + high) >> 1;
    if (scene.picks[middle].edges[8] <= t) low = middle + 1;
    else high = middle;
  }
  if (low === scene.picks.length) return { pick: -1, phase: "waiting" };
  const edges = scene.picks[low].edges;
  if (t < edges[0]) return { pick: low, phase: "waiting" };
  let k = 0;
  while (k < 7 && edges[k + 1] <= t) k++;
  return { pick: low, phase: PHASES[k], step: k };
}

/** The pick being set down after later ones at a time; undefined for none. */
function settingDown(t) {
  const down = scene.downs.find((one) => one[1] <= t && t < one[5]);
  return down && scene.picks[down[0]];
}

/** How a part rides in the gripper: its place and yaw in the tool frame, found when it is gripped. */
function ride(pick) {
  if (pick.ride) return pick.ride;
  const part = scene.parts[pick.part], t = pick.edges[3], tool = pose(jointsAt(t));
  const at = added(part.at, shift(t));
  pick.ride = { at: turned([at[0] - tool.tip[0], at[1] - tool.tip[1]], -tool.yaw), yaw: part.at[2] - tool.yaw };
  const end = pose(jointsAt(pick.released));
  pick.left = [...added(end.tip, turned(pick.ride.at, end.yaw)), end.yaw + pick.ride.yaw];
  return pick.ride;
}

/** Events of the run in order of time: picks when they grip, misses when their part can first be had. */
const events = [
  ...scene.picks.map((pick, k) => ({ t: pick.edges[3], part: pick.part, pick: k })),
  ...scene.parts.map((part, k) => ({ part, k })).filter(({ part }) => part.pick < 0).map(({ part, k }) => ({
    t: Math.min(Math.max(part.enters ?? part.known, part.known, scene.start), scene.end), part: k, pick: -1 })),
].sort((a, b) => a.t - b.t || a.part - b.part);

const kindOf = (part) => (part.kind < 0 ? "not recognised" : scene.kinds[part.kind].name);
const partWithNumber = (no) => scene.parts.findIndex((part) => part.no === no);
