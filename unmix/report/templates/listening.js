"use strict";
/* Blind listening: practice, then every trial in an order drawn for this listener; answers are saved as a file. */
const QUALITIES = ["Excellent", "Good", "Fair", "Poor", "Bad"];

function shuffled(items) {
  const order = [...items];
  for (let i = order.length - 1; i > 0; i -= 1) {
    const draw = new Uint32Array(1);
    crypto.getRandomValues(draw);
    const j = draw[0] % (i + 1);
    [order[i], order[j]] = [order[j], order[i]];
  }
  return order;
}

class ListeningTest {
  constructor(described) {
    this.described = described;
    this.scale = described.procedure === "scale";
    this.answers = [];
    this.volumeDb = -20;
    this.find = (selector) => document.querySelector(selector);
    this.pages = this.plan();
    this.at = -1;
    this.find("[data-begin]").addEventListener("click", () => this.begin());
    this.find("[data-sample]").addEventListener("click", () => this.sample());
    this.find("[data-next]").addEventListener("click", () => this.next());
    this.find("[data-save]").addEventListener("click", () => this.save());
    document.querySelectorAll("[data-volume]").forEach((slider) => {
      slider.addEventListener("input", () => this.volume(Number(slider.value)));
    });
    window.addEventListener("beforeunload", (event) => {
      if (this.answers.length && !this.saved) event.preventDefault();
    });
  }

  /* The pages: one for practice, then all, trials and signals in random order. */
  plan() {
    const pages = shuffled(this.described.trials).flatMap((trial) => {
      if (this.scale) return [{ trial, order: shuffled(trial.stimuli) }];
      const pairs = trial.stimuli.flatMap((a, i) => trial.stimuli.slice(i + 1).map((b) => shuffled([a, b])));
      return pairs.map((order) => ({ trial, order }));
    });
    const all = this.scale ? pages : shuffled(pages);
    const practice = all[all.length - 1];
    return [{ ...practice, order: shuffled(practice.order), practice: true }, ...all];
  }

  volume(db) {
    this.volumeDb = db;
    if (this.player) this.player.volume(db);
    document.querySelectorAll("[data-volume]").forEach((slider) => {
      slider.value = db;
      slider.setAttribute("aria-valuetext", `${db} dB`);
    });
  }

  open(trial) {
    if (this.player) this.player.close();
    this.player = new Player(trial.signals, trial.seconds, trial.sample_rate);
    this.player.current = trial.open;
    this.player.volumeDb = this.volumeDb;
    window.player = this.player;
  }

  async sample() {
    if (!this.player) this.open(this.pages[0].trial);
    await this.player.toggle();
    this.find("[data-sample]").textContent = this.player.playing ? "Stop the sample" : "Play the sample";
  }

  begin() {
    this.listener = this.find("[data-listener]").value.trim();
    if (!this.listener) {
      this.find("[data-step=start] [data-complaint]").textContent = "Please enter your code first.";
      this.find("[data-listener]").focus();
      return;
    }
    this.started = new Date().toISOString();
    this.step("trial");
    this.show(0);
  }

  step(name) {
    document.querySelectorAll("[data-step]").forEach((part) => { part.hidden = part.dataset.step !== name; });
  }

  show(at) {
    this.at = at;
    const page = this.pages[at];
    this.open(page.trial);
    this.scores = new Map();
    this.choice = undefined;
    this.since = performance.now();
    this.find("[data-heading]").textContent = page.practice ? "Practice" : `Page ${at} of ${this.pages.length - 1}`;
    this.find("[data-step=trial] [data-complaint]").textContent = "";
    this.find("[data-stimuli]").replaceChildren(this.scale ? this.sliders(page) : this.pair(page));
    this.bind();
    this.find("[data-heading]").focus();
  }

  /* Controls outlive pages: they are bound once, to whatever player there is. */
  bind() {
    this.player.onchange(() => this.changed());
    if (!this.bound) {
      this.bound = true;
      const act = (selector, type, work) => this.find(`[data-step=trial] ${selector}`).addEventListener(type, work);
      act("[data-play]", "click", () => this.player.toggle());
      act("[data-open]", "click", () => this.select(this.pages[this.at].trial.open));
      act("[data-position]", "input", (event) => this.player.seek(Number(event.target.value)));
      act("[data-loop]", "change", (event) => {
        if (!this.player.loop) this.player.setLoop(this.player.position(), this.player.position() + 3);
        this.player.repeatLoop(event.target.checked);
      });
      act("[data-loop-start]", "click", () => { this.from = this.player.position(); });
      act("[data-loop-end]", "click", () => this.player.setLoop(this.from || 0, this.player.position()));
      document.addEventListener("keydown", (event) => this.key(event));
      const frame = () => { this.draw(); requestAnimationFrame(frame); };
      requestAnimationFrame(frame);
    }
    this.from = 0;
    this.find("[data-step=trial] [data-position]").max = this.player.seconds;
    this.changed();
  }

  key(event) {
    if (this.at < 0 || this.find("[data-step=trial]").hidden || event.altKey || event.ctrlKey || event.metaKey) return;
    const order = this.pages[this.at].order;
    const digit = /^[0-9]$/.test(event.key) ? Number(event.key) : null;
    const onButton = event.target.closest("button");
    if (digit === 0) this.select(this.pages[this.at].trial.open);
    else if (digit !== null && order[digit - 1]) this.select(order[digit - 1]);
    else if (event.key === " " && !onButton) this.player.toggle();
    else if (event.key === "[") this.from = this.player.position();
    else if (event.key === "]") this.player.setLoop(this.from || 0, this.player.position());
    else if (event.key === "l") this.player.repeatLoop(!this.player.looping);
    else return;
    event.preventDefault();
  }

  select(id) {
    this.player.select(id);
    if (!this.player.playing) this.player.play();
  }

  changed() {
    const current = this.player.current;
    this.find("[data-step=trial] [data-play]").textContent = this.player.playing ? "Pause" : "Play";
    this.find("[data-step=trial] [data-loop]").checked = this.player.looping;
    this.find("[data-step=trial] [data-open]").setAttribute("aria-pressed", String(current === this.pages[this.at].trial.open));
    document.querySelectorAll("[data-hear]").forEach((button) => {
      button.setAttribute("aria-pressed", String(button.dataset.hear === current));
      button.closest(".stimulus").classList.toggle("playing", button.dataset.hear === current);
    });
  }

  draw() {
    const position = this.player.position();
    const slider = this.find("[data-step=trial] [data-position]");
    slider.value = position;
    slider.setAttribute("aria-valuetext", `${position.toFixed(1)} seconds`);
    this.find("[data-step=trial] [data-clock]").textContent = clockText(position);
  }

  hearButton(id, text) {
    const button = document.createElement("button");
    button.type = "button";
    button.className = "pick";
    button.dataset.hear = id;
    button.textContent = text;
    button.addEventListener("click", () => this.select(id));
    return button;
  }

  sliders(page) {
    const row = document.createElement("div");
    row.className = "sliders";
    const grades = document.createElement("div");
    grades.className = "qualities";
    grades.setAttribute("aria-hidden", "true");
    grades.append(...QUALITIES.map((word) => Object.assign(document.createElement("span"), { textContent: word })));
    row.append(grades, ...page.order.map((id, k) => {
      const box = document.createElement("div");
      box.className = "stimulus";
      const slider = Object.assign(document.createElement("input"), { type: "range", min: 0, max: 100, step: 1, value: 0 });
      slider.dataset.score = id;
      slider.setAttribute("aria-label", `Signal ${k + 1}: how good, 0 to 100`);
      const shown = document.createElement("output");
      shown.textContent = "not yet";
      const rate = () => {
        const score = Number(slider.value);
        this.scores.set(id, score);
        shown.textContent = String(score);
        slider.setAttribute("aria-valuetext", `${score}, ${QUALITIES[Math.min(4, Math.floor((100 - score) / 20))]}`);
      };
      slider.setAttribute("aria-valuetext", "not yet");
      slider.addEventListener("input", rate);
      slider.addEventListener("change", rate);
      box.append(this.hearButton(id, `Signal ${k + 1}`), document.createElement("br"), slider, document.createElement("br"), shown);
      return box;
    }));
    return row;
  }

  pair(page) {
    const row = document.createElement("fieldset");
    row.className = "choice";
    row.append(Object.assign(document.createElement("legend"), { textContent: "Which one comes closer to the reference?" }));
    const choices = [[page.order[0], "A"], [page.order[1], "B"], [null, "I cannot tell"]];
    choices.forEach(([id, name], k) => {
      const box = document.createElement("div");
      box.className = "stimulus";
      if (id !== null) box.append(this.hearButton(id, `Hear ${name}`), document.createElement("br"));
      const label = document.createElement("label");
      const radio = Object.assign(document.createElement("input"), { type: "radio", name: "choice", value: String(k) });
      radio.addEventListener("change", () => { this.choice = id; });
      label.append(radio, ` ${name}${id === null ? "" : " is closer"}`);
      box.append(label);
      row.append(box);
    });
    return row;
  }

  next() {
    const page = this.pages[this.at];
    const complain = (text) => { this.find("[data-step=trial] [data-complaint]").textContent = text; };
    const answer = {
      trial: page.trial.trial, practice: Boolean(page.practice), order: page.order,
      seconds: Math.round((performance.now() - this.since) / 100) / 10,
    };
    if (this.scale) {
      const missing = page.order.findIndex((id) => !this.scores.has(id));
      if (missing >= 0) { complain(`Signal ${missing + 1} has no score yet.`); return; }
      if (![...this.scores.values()].includes(100)) { complain("One of the signals is the reference itself: set it to 100."); return; }
      answer.scores = Object.fromEntries(this.scores);
    } else {
      if (this.choice === undefined) { complain("Please choose one of the three."); return; }
      answer.pair = page.order;
      answer.preferred = this.choice;
    }
    this.answers.push(answer);
    if (this.at + 1 < this.pages.length) { this.show(this.at + 1); return; }
    this.player.close();
    this.finished = new Date().toISOString();
    this.step("end");
    this.find("#end").focus();
  }

  result() {
    return {
      format: "unmix-listening-1", test: this.described.test, procedure: this.described.procedure, listener: this.listener,
      started: this.started, finished: this.finished, answers: this.answers,
    };
  }

  save() {
    const name = this.listener.replace(/[^A-Za-z0-9_-]+/g, "-") || "listener";
    const link = document.createElement("a");
    link.href = URL.createObjectURL(new Blob([JSON.stringify(this.result(), null, 1)], { type: "application/json" }));
    link.download = `answers-${name}.json`;
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 10000);
    this.saved = true;
    this.find("[data-saved]").textContent = `Saved as ${link.download}.`;
  }
}
