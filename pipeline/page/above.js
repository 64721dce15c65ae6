/** The cell from above, to scale: x to the right, y up, as in the cell frame. */
class Above {
  constructor(canvas) {
    this.canvas = canvas;
  }

  draw(t, chosen) {
    const [left, bottom, right, top] = scene.view;
    const wide = this.canvas.clientWidth, most = Math.max(window.innerHeight * 0.72, 320);
    const scale = Math.min(wide / (right - left), most / (top - bottom));
    const height = Math.round((top - bottom) * scale) + 24; // and a strip for the rule
    if (this.canvas.style.height !== `${height}px`) this.canvas.style.height = `${height}px`;
    const { context, width } = fresh(this.canvas, height);
    const aside = (width - (right - left) * scale) / 2;
    this.context = context;
    this.scale = scale;
    this.to = ([x, y]) => [aside + (x - left) * scale, (top - y) * scale];
    this.from = ([x, y]) => [left + (x - aside) / scale, top - y / scale];
    if (scene.belt) this.belt(t);
    this.grounds();
    this.partsAt(t, chosen);
    this.arm(t);
    this.rule(height);
  }

  belt(t) {
    const { context, to } = this, { heading: [hx, hy], across: [near, far], window: span } = scene.belt;
    const at = (along, side) => to([along * hx - side * hy, along * hy + side * hx]);
    const long = 4 * Math.hypot(scene.view[2] - scene.view[0], scene.view[3] - scene.view[1]);
    const band = (a, b) => {
      context.beginPath();
      for (const [along, side] of [[a, near], [b, near], [b, far], [a, far]]) context.lineTo(...at(along, side));
      context.closePath();
    };
    band(-long, long);
    context.fillStyle = inks.belt;
    context.fill();
    context.strokeStyle = inks.line;
    context.lineWidth = 1;
    const way = ((travel.at(t) % 100) + 100) % 100;
    context.beginPath();
    for (let along = -Math.ceil(long / 100) * 100 + way; along < long; along += 100) {
      context.moveTo(...at(along, near));
      context.lineTo(...at(along, far));
    }
    context.stroke();
    if (!span) return;
    band(span[0], span[1]);
    context.save();
    context.globalAlpha = 0.1;
    context.fillStyle = inks.deep;
    context.fill();
    context.restore();
    context.strokeStyle = inks.deep;
    context.setLineDash([6, 4]);
    context.stroke();
    context.setLineDash([]);
    const [x, y] = at((span[0] + span[1]) / 2, far), [bx, by] = at((span[0] + span[1]) / 2, near);
    const [ux, uy] = [(x - bx) / Math.hypot(x - bx, y - by), (y - by) / Math.hypot(x - bx, y - by)];
    context.save();
    context.translate(bx - 12 * ux, by - 12 * uy);
    let turn = Math.atan2(-hy, hx);
    if (Math.abs(turn) > Math.PI / 2 + 0.01) turn += Math.PI;
    context.rotate(turn);
    lettered(context, "pick window", 0, 0, inks.deep);
    context.restore();
  }

  grounds() {
    const { context, to, scale } = this, named = [];
    for (const place of scene.places) {
      context.strokeStyle = inks.soft;
      context.lineWidth = 1;
      let [sumX, least, most] = [0, Infinity, -Infinity];
      for (let i = 0; i < place.slots.length; i += 2) {
        const [x, y] = to([place.slots[i], place.slots[i + 1]]);
        context.strokeRect(x - 5.5 * Math.max(scale, 0.6), y - 5.5 * Math.max(scale, 0.6), 11 * Math.max(scale, 0.6), 11 * Math.max(scale, 0.6));
        sumX += x;
        [least, most] = [Math.min(least, y), Math.max(most, y)];
      }
      const x = (2 * sumX) / place.slots.length, half = context.measureText(place.name).width / 2;
      const taken = named.some(([at, y, wide]) => Math.abs(at - x) < wide + half && Math.abs(y - least + 22) < 14);
      named.push([x, taken ? most + 22 : least - 22, half]);
      lettered(context, place.name, ...named.at(-1).slice(0, 2), inks.soft);
    }
    const hatch = hatching(context, inks.alarm);
    for (const keepout of scene.keepouts) {
      trace(context, keepout.at, to);
      context.fillStyle = hatch;
      context.fill();
      context.strokeStyle = inks.alarm;
      context.stroke();
      const [x, y] = to([keepout.at[0], keepout.at[1]]);
      lettered(context, keepout.name || "keep-out", Math.max(x, 44), y + 12, inks.alarm);
    }
  }

  partsAt(t, chosen) {
    const now = doing(t), by = shift(t), filled = scene.places.map(() => 0);
    const held = scene.picks.filter((pick) => pick.edges[3] <= t && t < pick.released);
    const done = [];
    for (const pick of scene.picks) {
      if (pick.released > t) continue;
      done.push([pick, filled[pick.place]++]);
    }
    for (const [pick, order] of done) {
      const count = scene.places[pick.place].count;
      if (order < Math.floor((filled[pick.place] - 1) / count) * count) continue; // that tray has been exchanged
      ride(pick);
      this.part(pick.part, pick.left, 0.55, { chosen: chosen === pick.part, placed: true });
    }
    scene.parts.forEach((part, k) => {
      const pick = part.pick >= 0 ? scene.picks[part.pick] : null;
      if ((pick && pick.edges[3] <= t) || (!scene.belt && (t < part.enters || (part.leaves !== null && t >= part.leaves)))) return;
      const at = [part.at[0] + by[0], part.at[1] + by[1], part.at[2]];
      const ahead = t < part.known;
      this.part(k, at, ahead ? 0.3 : 1, { chosen: chosen === k, ahead, next: now.pick >= 0 && scene.picks[now.pick].part === k });
    });
    this.held = held;
  }

  part(k, at, alpha, { chosen = false, ahead = false, next = false, placed = false } = {}) {
    const part = scene.parts[k], { context, to, scale } = this;
    const [x, y] = to(at);
    if (x < -60 || y < -60 || x > this.canvas.clientWidth + 60 || y > this.canvas.clientHeight + 60) return;
    const ink = inkOf(part.kind), outline = part.outline ?? (part.kind < 0 ? 8 : scene.kinds[part.kind].outline);
    context.save();
    context.globalAlpha = alpha;
    if (typeof outline === "number") {
      context.beginPath();
      context.arc(x, y, outline * scale, 0, 2 * Math.PI);
    } else {
      const yaw = part.outline ? at[2] - part.at[2] : at[2], mirror = part.down && !part.outline ? -1 : 1;
      trace(context, outline, ([px, py]) => to(added(at, turned([px, py * mirror], yaw))));
    }
    const picked = part.pick >= 0;
    context.fillStyle = picked ? ink : inks.card;
    context.globalAlpha = alpha * (picked ? 0.3 : 0.5);
    context.fill();
    context.globalAlpha = alpha;
    context.strokeStyle = ink;
    context.lineWidth = 1.5;
    context.setLineDash(ahead ? [1.5, 3] : picked ? [] : [5, 3]);
    context.stroke();
    context.setLineDash([]);
    if (part.kind >= 0 && typeof outline !== "number") {
      context.beginPath(); // the grip frame's x axis
      context.moveTo(x, y);
      context.lineTo(...to(added(at, turned([12, 0], at[2]))));
      context.stroke();
    }
    mark(context, part.kind, x, y, 0.8);
    if (chosen || next) {
      context.beginPath();
      context.arc(x, y, Math.max((typeof outline === "number" ? outline : 20) * scale + 6, 15), 0, 2 * Math.PI);
      context.strokeStyle = chosen ? inks.sand : inks.deep;
      context.lineWidth = chosen ? 3 : 1.5;
      context.stroke();
    }
    context.font = `11px ${FONT}`;
    if (!placed) lettered(context, String(part.no) + (picked ? "" : " ×"), x + 10, y - 10, inks.ink, "left");
    context.restore();
  }

  arm(t) {
    const { context, to, scale } = this, { base, links, radius } = scene.arm, at = pose(jointsAt(t));
    const half = Math.max(radius || 20, 8) * scale;
    const link = (p, q) => {
      context.beginPath();
      context.moveTo(...to(p));
      context.lineTo(...to(q));
      context.lineCap = "round";
      context.globalAlpha = 0.35;
      context.strokeStyle = inks.soft;
      context.lineWidth = 2 * half;
      context.stroke();
      context.globalAlpha = 0.9;
      context.strokeStyle = inks.ink;
      context.lineWidth = 2;
      context.stroke();
    };
    context.save();
    context.beginPath();
    context.arc(...to(base), (links[0] + links[1]) * scale, 0, 2 * Math.PI);
    context.setLineDash([2, 6]);
    context.strokeStyle = inks.soft;
    context.stroke();
    context.setLineDash([]);
    link(base, at.elbow);
    link(at.elbow, at.quill);
    for (const [p, size] of [[base, 7], [at.elbow, 5], [at.quill, 4]]) {
      context.beginPath();
      context.arc(...to(p), size, 0, 2 * Math.PI);
      context.fillStyle = inks.card;
      context.fill();
      context.lineWidth = 2;
      context.stroke();
    }
    for (const pick of this.held) {
      const way = ride(pick);
      this.part(pick.part, [...added(at.tip, turned(way.at, at.yaw)), at.yaw + way.yaw], 1, { next: true });
    }
    const now = doing(t), kind = now.pick >= 0 ? scene.parts[scene.picks[now.pick].part].kind : -1;
    const jaws = kind >= 0 && scene.kinds[kind].jaws.length ? scene.kinds[kind].jaws : scene.arm.jaws;
    for (const jaw of jaws) {
      trace(context, jaw, (p) => to(added(at.tip, turned(p, at.yaw))));
      context.fillStyle = inks.ink;
      context.globalAlpha = 0.75;
      context.fill();
    }
    context.globalAlpha = 1;
    context.strokeStyle = inks.sand;
    context.lineWidth = 2.5;
    context.beginPath(); // the tool's turn: its x axis
    context.moveTo(...to(at.tip));
    context.lineTo(...to(added(at.tip, turned([30, 0], at.yaw))));
    context.stroke();
    context.restore();
  }

  rule(height) {
    const { context, scale } = this, x = 14, y = height - 14;
    context.strokeStyle = inks.ink;
    context.lineWidth = 1.5;
    context.beginPath();
    context.moveTo(x, y - 4);
    context.lineTo(x, y);
    context.lineTo(x + 100 * scale, y);
    context.lineTo(x + 100 * scale, y - 4);
    context.stroke();
    lettered(context, "100 mm", x + 50 * scale, y - 9, inks.ink);
  }

  /** Index of the part drawn nearest to a point of the canvas, -1 where none is near. */
  nearest(t, point) {
    const [x, y] = this.from(point), by = shift(t);
    let best = -1, least = Math.max(25, 18 / this.scale);
    scene.parts.forEach((part, k) => {
      const pick = part.pick >= 0 ? scene.picks[part.pick] : null;
      if (pick && pick.edges[3] <= t) return;
      const apart = Math.hypot(part.at[0] + by[0] - x, part.at[1] + by[1] - y);
      if (apart < least) [best, least] = [k, apart];
    });
    return best;
  }
}
