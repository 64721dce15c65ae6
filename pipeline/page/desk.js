/** The clock of the desk, and everything that moves it: keys, buttons, slider, links of the page. */
const byId = (id) => document.getElementById(id);

class Desk {
  constructor() {
    this.t = scene.start;
    this.chosen = -1;
    this.playing = false;
    this.above = new Above(byId("above"));
    this.camera = scene.frames.length ? new Camera(byId("shot"), byId("found"), byId("shot-told")) : null;
    this.timeline = new Timeline(byId("timeline"), byId("overview"));
    byId("camera").hidden = !this.camera;
    byId("camera").closest(".views").classList.toggle("blind", !this.camera);
    byId("live").hidden = false;
    byId("clock").min = scene.start;
    byId("clock").max = scene.end;
    this.fillJumps();
    this.listen();
    this.goTo(this.opening(), -1);
    clearTimeout(this.telling);
  }

  /** A moment worth opening with: as the middle pick is gripped. */
  opening() {
    const pick = scene.picks[Math.floor(scene.picks.length / 2)];
    return pick ? pick.edges[2] : scene.start;
  }

  fillJumps() {
    const groups = [["Picks", events.filter((e) => e.pick >= 0)], ["Misses", events.filter((e) => e.pick < 0)]];
    for (const [label, listed] of groups) {
      if (!listed.length) continue;
      const group = document.createElement("optgroup");
      group.label = label;
      for (const event of listed) {
        const part = scene.parts[event.part], option = document.createElement("option");
        option.value = events.indexOf(event);
        option.textContent = `${event.pick >= 0 ? `pick ${event.pick + 1}: ` : ""}part ${part.no}, ${kindOf(part)}, ${event.t.toFixed(2)} s`
          + (part.why ? `, ${part.why}` : "");
        group.append(option);
      }
      byId("goto").append(group);
    }
  }

  goTo(t, chosen = this.chosen) {
    this.t = Math.min(Math.max(t, scene.start), scene.end);
    this.chosen = chosen;
    this.draw();
  }

  draw() {
    this.above.draw(this.t, this.chosen);
    this.camera?.draw(this.t, this.chosen);
    this.timeline.draw(this.t, this.chosen);
    byId("clock").value = this.t;
    byId("clock").setAttribute("aria-valuetext", `${this.t.toFixed(1)} seconds`);
    byId("time").textContent = `${this.t.toFixed(2)} s`;
    this.tell(this.sentence());
    byId("next").textContent = this.coming();
    this.numbers();
  }

  /** Shows a sentence, and says it to screen readers once the clock has come to rest: no torrent of words. */
  tell(sentence) {
    byId("now").textContent = sentence;
    clearTimeout(this.telling);
    if (!this.playing) this.telling = setTimeout(() => {
      if (byId("told").textContent !== sentence) byId("told").textContent = sentence;
    }, 600);
  }

  /** The picks after this one. */
  coming() {
    const { pick } = doing(this.t);
    const next = pick < 0 ? [] : scene.picks.slice(pick + 1, pick + 5).map((one) => scene.parts[one.part]);
    return next.length ? `Then ${next.map((part) => `part ${part.no} (${kindOf(part)})`).join(", ")}.` : "";
  }

  sentence() {
    const { pick, phase, step } = doing(this.t);
    const down = settingDown(this.t);
    let told;
    if (down) told = `Sets part ${scene.parts[down.part].no} down in ${scene.places[down.place].name} ${down.slot + 1}.`;
    else if (phase === "waiting" && scene.waits.some(([a, b]) => a <= this.t && this.t < b)) told = "Goes where the next part is to come.";
    else if (pick < 0) told = this.t >= (scene.picks.at(-1)?.edges[8] ?? scene.start) && scene.picks.length ? "The last pick is done." : "The arm waits.";
    else {
      const part = scene.parts[scene.picks[pick].part], name = `part ${part.no} (${kindOf(part)})`;
      const kept = scene.picks[pick].kept;
      const place = `${scene.places[scene.picks[pick].place].name} ${scene.picks[pick].slot + 1}`;
      if (phase === "waiting") told = this.t >= scene.picks[pick].decided ? `Waits for ${name}.` : "Waits.";
      else told = [`Lifts off, ${name} is next.`, `Goes across to ${name}.`, `Goes down on ${name}.`, `Grips ${name}${travel ? ", moving with it" : ""}.`,
        `Lifts ${name}.`, kept ? `Keeps ${name} and picks on.` : `Carries ${name} across to ${place}.`,
        kept ? `Keeps ${name} and picks on.` : `Sets ${name} down in ${place}.`, `Lets go of ${name}.`][step];
      told = `Pick ${pick + 1} of ${scene.picks.length}. ${told}`;
    }
    const chosen = scene.parts[this.chosen];
    return chosen?.why ? `${told} Part ${chosen.no} is missed, ${chosen.why}.` : told;
  }

  numbers() {
    const joints = jointsAt(this.t), at = pose(joints), degrees = (value) => `${((value * 180) / Math.PI).toFixed(1)}°`;
    [degrees(joints[0]), degrees(joints[1]), `${joints[2].toFixed(1)} mm`, degrees(joints[3])].forEach((text, j) => {
      byId(`now-j${j + 1}`).textContent = text;
    });
    byId("now-tip").textContent = `${at.tip[0].toFixed(0)}, ${at.tip[1].toFixed(0)}, ${at.z.toFixed(0)} mm`;
    byId("now-belt").textContent = travel ? `${((travel.at(this.t + 0.05) - travel.at(this.t - 0.05)) / 0.1).toFixed(0)} mm/s` : "still";
  }

  play(on = !this.playing) {
    if (on === this.playing) return;
    this.playing = on;
    byId("play").textContent = on ? "Pause" : "Play";
    byId("play").setAttribute("aria-label", on ? "Pause" : "Play");
    if (!on) {
      this.tell(this.sentence());
      return;
    }
    if (this.t >= scene.end) this.t = scene.start;
    let last = performance.now();
    const tick = (moment) => {
      if (!this.playing) return;
      const passed = Math.min(Math.max(moment - last, 0), 200) / 1000;
      last = moment;
      this.goTo(this.t + passed * Number(byId("speed").value));
      if (this.t >= scene.end) this.play(false);
      else requestAnimationFrame(tick);
    };
    requestAnimationFrame(tick);
  }

  /** On to the next pick or miss, or back to the one before. */
  leap(on) {
    const event = on ? events.find((e) => e.t > this.t + 1e-3) : events.findLast((e) => e.t < this.t - 1e-3);
    if (event) this.goTo(event.t, event.part);
  }

  listen() {
    byId("play").addEventListener("click", () => this.play());
    byId("before").addEventListener("click", () => this.leap(false));
    byId("after").addEventListener("click", () => this.leap(true));
    byId("clock").addEventListener("input", (event) => this.goTo(Number(event.target.value)));
    byId("span").addEventListener("change", (event) => {
      this.timeline.span = Number(event.target.value);
      this.draw();
    });
    byId("goto").addEventListener("change", (event) => {
      const chosen = events[Number(event.target.value)];
      if (event.target.value !== "" && chosen) this.goTo(chosen.t, chosen.part);
    });
    const place = (event) => [event.offsetX, event.offsetY];
    byId("above").addEventListener("click", (event) => this.goTo(this.t, this.above.nearest(this.t, place(event))));
    byId("timeline").addEventListener("click", (event) => this.goTo(this.timeline.timeAt(event.offsetX), this.timeline.partAt(place(event))));
    byId("overview").addEventListener("click", (event) => {
      const share = (event.offsetX - 8) / Math.max(event.target.clientWidth - 16, 1);
      this.goTo(scene.start + share * (scene.end - scene.start));
    });
    document.addEventListener("click", (event) => {
      const link = event.target.closest?.("a.jump");
      if (!link) return;
      this.play(false);
      this.goTo(Number(link.dataset.t), partWithNumber(Number(link.dataset.part)));
    });
    document.addEventListener("keydown", (event) => this.key(event));
    this.inView = true;
    new IntersectionObserver(([entry]) => { this.inView = entry.isIntersecting; }).observe(byId("live"));
    new ResizeObserver(() => this.draw()).observe(byId("live"));
    const again = () => {
      readInks();
      this.camera?.over();
      this.draw();
    };
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", again);
    for (const [moment, paper] of [["beforeprint", true], ["afterprint", false]]) {
      window.addEventListener(moment, () => {
        document.documentElement.classList.toggle("paper", paper);
        again();
      });
    }
  }

  key(event) {
    const on = event.target, slider = on === byId("clock");
    if (event.ctrlKey || event.metaKey || event.altKey || !this.inView) return;
    if (!slider && on.closest?.("input, select, textarea, button, a, summary, .scroll, pre, .cases")) return;
    const step = event.shiftKey ? 1 : 0.1;
    const keys = {
      " ": () => this.play(), ArrowLeft: () => this.goTo(this.t - step), ArrowRight: () => this.goTo(this.t + step),
      n: () => this.leap(true), p: () => this.leap(false), Home: () => this.goTo(scene.start), End: () => this.goTo(scene.end),
    };
    if ((event.key === "Home" || event.key === "End") && !slider) return;
    if (!keys[event.key]) return;
    event.preventDefault();
    keys[event.key]();
  }
}

readInks();
const desk = new Desk();
