/** Colours of the page's style sheet, read anew when it changes between light, dark and paper. */
let inks = {};
function readInks() {
  const style = getComputedStyle(document.documentElement);
  for (const name of ["paper", "card", "ink", "soft", "line", "faint", "deep", "sand", "alarm", "belt", "kind-0", "kind-1",
    "kind-2", "kind-3", "kind-4", "kind-5", "kind-unknown", "phase-across", "phase-up", "phase-down", "phase-dwell",
    "phase-release"]) inks[name] = style.getPropertyValue(`--${name}`).trim();
}
const inkOf = (kind) => inks[kind < 0 ? "kind-unknown" : `kind-${scene.kinds[kind].colour}`];
const MARK_UNKNOWN = "M-4.8 -3.2L-3.2 -4.8L0 -1.6L3.2 -4.8L4.8 -3.2L1.6 0L4.8 3.2L3.2 4.8L0 1.6L-3.2 4.8L-4.8 3.2L-1.6 0Z";
const marks = new Map();
function markOf(kind) {
  if (!marks.has(kind)) marks.set(kind, new Path2D(kind < 0 ? MARK_UNKNOWN : scene.kinds[kind].mark));
  return marks.get(kind);
}
const FONT = 'system-ui, "Segoe UI", "Noto Sans", "Liberation Sans", sans-serif';

/** A canvas sized for the screen's pixels; draw in CSS pixels. Answers its context, width and height. */
function fresh(canvas, height) {
  const width = canvas.clientWidth, tall = height ?? canvas.clientHeight, dense = window.devicePixelRatio || 1;
  const paper = document.documentElement.classList.contains("paper"); // on paper, what is cleared comes out white
  if (paper || canvas.width !== Math.round(width * dense) || canvas.height !== Math.round(tall * dense)) {
    canvas.width = Math.round(width * dense);
    canvas.height = Math.round(tall * dense);
  }
  const context = canvas.getContext("2d");
  context.setTransform(dense, 0, 0, dense, 0, 0);
  if (!paper) context.clearRect(0, 0, width, tall);
  context.font = `12px ${FONT}`;
  return { context, width, height: tall };
}

/** Trace a polygon given as x, y, x, y, ... through a map of points. */
function trace(context, flat, map) {
  context.beginPath();
  for (let i = 0; i < flat.length; i += 2) {
    const [x, y] = map([flat[i], flat[i + 1]]);
    if (i) context.lineTo(x, y);
    else context.moveTo(x, y);
  }
  context.closePath();
}

/** Text with a halo of the paper's colour, so that it reads over anything. */
function lettered(context, text, x, y, ink, align = "center") {
  context.textAlign = align;
  context.textBaseline = "middle";
  context.lineJoin = "round";
  context.lineWidth = 3.5;
  context.strokeStyle = inks.card;
  context.strokeText(text, x, y);
  context.fillStyle = ink;
  context.fillText(text, x, y);
}

/** A kind's mark at a point. */
function mark(context, kind, x, y, size = 1) {
  context.save();
  context.translate(x, y);
  context.scale(size, size);
  context.lineWidth = 1.5 / size;
  context.strokeStyle = inks.card;
  context.stroke(markOf(kind));
  context.fillStyle = inkOf(kind);
  context.fill(markOf(kind));
  context.restore();
}

/** Hatching at 45 degrees, as a fill. */
function hatching(context, ink) {
  const tile = document.createElement("canvas");
  tile.width = tile.height = 8;
  const on = tile.getContext("2d");
  on.strokeStyle = ink;
  on.lineWidth = 1;
  on.beginPath();
  for (const d of [-8, 0, 8]) {
    on.moveTo(d, 8);
    on.lineTo(d + 8, 0);
  }
  on.stroke();
  return context.createPattern(tile, "repeat");
}
