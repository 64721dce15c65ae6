/** What the arm does over time, and below it each part's window in a lane. */
class Timeline {
  constructor(canvas, overview) {
    Object.assign(this, { canvas, overview, span: 10 });
    this.lanes = lanesOf(scene.parts);
  }

  /** First and last time shown. */
  shownAt(t) {
    const whole = scene.end - scene.start;
    const span = this.span ? Math.min(this.span, whole) : whole;
    const start = Math.min(Math.max(t - 0.35 * span, scene.start), scene.end - span);
    return [start, start + Math.max(span, 1e-3)];
  }

  draw(t, chosen) {
    const [start, end] = this.shownAt(t);
    const visible = scene.parts.map((part, k) => k).filter((k) => shownFrom(scene.parts[k]) < end && shownTo(scene.parts[k]) > start);
    const most = Math.max(0, ...visible.map((k) => this.lanes[k] + 1));
    this.rows = Math.max(this.rows ?? 0, most);
    const lane = 17, top = 56, height = top + this.rows * lane + 6;
    if (this.canvas.style.height !== `${height}px`) this.canvas.style.height = `${height}px`;
    const { context, width } = fresh(this.canvas, height);
    this.x = (at) => ((at - start) / (end - start)) * width;
    this.timeAt = (x) => start + (x / width) * (end - start);
    this.scaleMarks(context, start, end, height);
    this.phases(context, start, end);
    this.boxes = [];
    for (const k of visible) this.part(context, k, top + this.lanes[k] * lane, lane - 4, chosen === k, t);
    this.now(context, t, height);
    this.whole(t, start, end);
  }

  scaleMarks(context, start, end, height) {
    const step = [0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1800, 3600].find((s) => (end - start) / s <= Math.min(this.canvas.clientWidth / 56, 12)) ?? 7200;
    context.strokeStyle = inks.line;
    context.lineWidth = 1;
    for (let at = Math.ceil(start / step) * step; at <= end; at += step) {
      context.beginPath();
      context.moveTo(this.x(at), 18);
      context.lineTo(this.x(at), height);
      context.stroke();
      const x = this.x(at);
      if (x > 12 && x < this.canvas.clientWidth - 14) lettered(context, `${Number(at.toFixed(1))} s`, x, 9, inks.soft);
    }
  }

  phases(context, start, end) {
    const glyphs = { up: "↑", across: "→", down: "↓", dwell: "•", release: "▽" };
    const box = (a, b, name) => {
      const x = this.x(a), wide = this.x(b) - x;
      if (name === "waiting") {
        context.strokeStyle = inks.soft;
        context.setLineDash([2, 3]);
        context.beginPath();
        context.moveTo(x, 36.5);
        context.lineTo(x + wide, 36.5);
        context.stroke();
        context.setLineDash([]);
        const [left, right] = [Math.max(x, 0), Math.min(x + wide, this.canvas.clientWidth)];
        if (right - left > 60) lettered(context, "waiting", (left + right) / 2, 36, inks.soft);
        return;
      }
      context.fillStyle = inks[`phase-${name}`];
      context.fillRect(x, 24, Math.max(wide - 0.5, 0.5), 24);
      context.fillStyle = inks.card;
      context.textAlign = "center";
      context.textBaseline = "middle";
      if (wide > 46 && name === "across") context.fillText("across", x + wide / 2, 36);
      else if (wide > 11) context.fillText(glyphs[name], x + wide / 2, 36);
    };
    let free = scene.start;
    scene.picks.forEach((pick, k) => {
      const e = pick.edges;
      if (e[8] > start && free < end) {
        box(free, e[0], "waiting");
        for (let i = 0; i < 8; i++) if (e[i + 1] > e[i]) box(e[i], e[i + 1], PHASES[i]);
      }
      free = e[8];
    });
    if (free < end) box(free, scene.end, "waiting");
    for (const [, ...e] of scene.downs) {
      if (e[4] > start && e[0] < end) ["up", "across", "down", "release"].forEach((name, i) => box(e[i], e[i + 1], name));
    }
    for (const [a, b] of scene.waits) if (b > start && a < end) box(a, b, "across");
  }

  part(context, k, y, tall, chosen, t) {
    const part = scene.parts[k], ink = inkOf(part.kind), to = Math.min(shownTo(part), scene.end);
    const pick = part.pick >= 0 ? scene.picks[part.pick] : null, opens = shownFrom(part);
    const [from, end] = [this.x(Math.min(opens, to)), this.x(to)];
    context.save();
    if (t < part.known) context.globalAlpha = 0.6;
    context.strokeStyle = ink;
    context.lineWidth = 1;
    context.setLineDash(pick ? [] : [4, 3]);
    context.strokeRect(from + 0.5, y + 0.5, Math.max(end - from - 1, 1), tall - 1);
    context.setLineDash([]);
    if (pick) {
      const grip = this.x(pick.edges[3]), off = this.x(pick.edges[4]);
      context.globalAlpha *= 0.3;
      context.fillStyle = ink;
      context.fillRect(from, y, Math.max(grip - from, 1), tall);
      context.globalAlpha = 1;
      context.fillRect(grip, y, Math.max(off - grip, 3), tall);
    }
    if (chosen) {
      context.strokeStyle = inks.sand;
      context.lineWidth = 3;
      context.strokeRect(from - 1, y - 1, Math.max(end - from, 4) + 2, tall + 2);
    }
    const at = Math.min(Math.max(from, 0) + 9, Math.max(end - 9, from + 9));
    mark(context, part.kind, at, y + tall / 2, 0.65);
    context.font = `10.5px ${FONT}`;
    lettered(context, part.no + (pick ? "" : " ×"), at + 8, y + tall / 2 + 0.5, inks.ink, "left");
    context.restore();
    this.boxes.push([from, y, end, y + tall, k]);
  }

  now(context, t, height) {
    context.strokeStyle = inks.alarm;
    context.lineWidth = 1.5;
    context.beginPath();
    context.moveTo(this.x(t), 16);
    context.lineTo(this.x(t), height);
    context.stroke();
  }

  whole(t, start, end) {
    const { context, width, height } = fresh(this.overview), edge = 8; // half of the slider's knob
    const x = (at) => edge + ((at - scene.start) / Math.max(scene.end - scene.start, 1e-3)) * (width - 2 * edge);
    context.fillStyle = inks.faint;
    context.fillRect(x(start), 0, x(end) - x(start), height);
    for (const event of events) {
      const part = scene.parts[event.part];
      context.fillStyle = context.strokeStyle = inkOf(part.kind);
      if (event.pick >= 0) context.fillRect(x(event.t) - 0.75, 2, 1.5, 12);
      else {
        const at = x(event.t), y = height - 7;
        context.lineWidth = 1.5;
        context.beginPath();
        for (const [a, b] of [[-3, -3], [-3, 3]]) {
          context.moveTo(at + a, y + b);
          context.lineTo(at - a, y - b);
        }
        context.stroke();
      }
    }
  }

  /** Index of the part whose bar is at a point; -1 for none. */
  partAt([x, y]) {
    const hit = this.boxes.find(([left, top, right, bottom]) => x >= left - 2 && x <= right + 2 && y >= top && y <= bottom);
    return hit ? hit[4] : -1;
  }
}

const shownFrom = (part) => Math.max(part.known, part.enters ?? part.known);
const shownTo = (part) => Math.max(part.leaves ?? scene.end, shownFrom(part) + 0.2);

/** A lane for each part, so that bars that overlap in time lie in different ones. */
function lanesOf(parts) {
  const free = [], lanes = new Array(parts.length);
  const order = parts.map((part, k) => k).sort((a, b) => shownFrom(parts[a]) - shownFrom(parts[b]) || a - b);
  for (const k of order) {
    let lane = free.findIndex((until) => until <= shownFrom(parts[k]));
    if (lane < 0) lane = free.push(0) - 1;
    free[lane] = shownTo(parts[k]);
    lanes[k] = lane;
  }
  return lanes;
}
