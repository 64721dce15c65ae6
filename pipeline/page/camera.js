/** The camera's frame of a moment, with what was found drawn over it. */
class Camera {
  constructor(image, canvas, told) {
    Object.assign(this, { image, canvas, told, shown: -1 });
    image.addEventListener("load", () => this.over());
  }

  draw(t, chosen) {
    let k = -1;
    while (k + 1 < scene.frames.length && scene.frames[k + 1].t <= t + 1e-9) k++;
    k = Math.max(k, 0);
    if (k === this.shown && chosen === this.chosen) return;
    const frame = scene.frames[k];
    this.chosen = chosen;
    if (k !== this.shown) {
      this.shown = k;
      this.image.width = frame.size[0];
      this.image.height = frame.size[1];
      this.image.src = frame.src;
      this.image.alt = `Camera frame ${frame.no}`;
      this.told.textContent = `Frame ${frame.no}, taken at ${frame.t.toFixed(2)} s: ${this.sentence(frame)}`;
    }
    this.over();
  }

  sentence(frame) {
    const many = new Map();
    for (const one of frame.found) {
      const name = (one.kind < 0 ? "not recognised" : scene.kinds[one.kind].name) + (one.down ? " on its wrong side" : "");
      many.set(name, (many.get(name) ?? 0) + 1);
    }
    return [...many].map(([name, n]) => `${n} ${name}`).join(", ") || "nothing found";
  }

  over() {
    const frame = scene.frames[this.shown];
    if (!frame) return;
    const { context, width } = fresh(this.canvas), scale = width / frame.size[0];
    const bright = ["#61a9f2", "#f5a240", "#3ac595", "#f36956", "#90cffb", "#e6b2c8"];
    for (const one of frame.found) {
      const ink = one.kind < 0 ? "#dddddd" : bright[scene.kinds[one.kind].colour];
      trace(context, one.at, ([x, y]) => [x * scale, y * scale]);
      context.setLineDash([]);
      context.lineWidth = one.part === this.chosen ? 6 : 3.5;
      context.strokeStyle = one.part === this.chosen ? "#ffffff" : "rgba(0,0,0,0.55)";
      context.stroke();
      context.lineWidth = 1.6;
      context.setLineDash(one.down || one.kind < 0 ? [5, 3] : []);
      context.strokeStyle = ink;
      context.stroke();
      context.setLineDash([]);
      let [left, top] = [Infinity, Infinity];
      for (let i = 0; i < one.at.length; i += 2) [left, top] = [Math.min(left, one.at[i]), Math.min(top, one.at[i + 1])];
      const no = one.part >= 0 ? `${scene.parts[one.part].no} ` : "";
      const text = no + (one.kind < 0 ? "?" : scene.kinds[one.kind].name) + (one.down ? " ↓" : "");
      context.font = `11px ${FONT}`;
      context.lineJoin = "round";
      context.textAlign = "left";
      context.textBaseline = "alphabetic";
      context.lineWidth = 3;
      context.strokeStyle = "rgba(0,0,0,0.75)";
      const at = [Math.max(left * scale, 2), Math.max(top * scale - 4, 11)];
      context.strokeText(text, ...at);
      context.fillStyle = ink;
      context.fillText(text, ...at);
    }
  }
}
