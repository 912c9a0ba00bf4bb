"use strict";
/* One transport for all signals of a page. Every signal is decoded, started at the same instant of the audio clock and
   runs all the time; switching only moves gains, over a short fade, so that time never jumps. */
class Player {
  static FADE_S = 0.02;
  static EDGE_S = 0.006;
  static AHEAD_S = 1.5;

  /* signals: [{id, matched, asItWas}], their FLAC in the element "audio-ID"; seconds: length; start: time of sample 0 */
  constructor(signals, seconds, sampleRate) {
    this.signals = signals;
    this.seconds = seconds;
    this.sampleRate = sampleRate;
    this.current = signals[0].id;
    this.matched = true;
    this.volumeDb = -12;
    this.loop = null;
    this.looping = false;
    this.offset = 0;
    this.playing = false;
    this.voices = null;
    this.listeners = [];
  }

  onchange(listener) { this.listeners.push(listener); }
  changed() { this.listeners.forEach((listener) => listener(this)); }

  async ready() {
    if (!this.loading) this.loading = this._load();
    return this.loading;
  }

  async _load() {
    const Context = window.AudioContext || window.webkitAudioContext;
    try {
      this.context = new Context({ sampleRate: this.sampleRate, latencyHint: "interactive" });
    } catch (_) {
      this.context = new Context();  // this browser plays at its own rate only; decoding resamples
    }
    this.master = this.context.createGain();
    this.master.gain.value = this._volume();
    this.master.connect(this.context.destination);
    this.buffers = new Map();
    await Promise.all(this.signals.map(async (signal) => {
      const text = atob(document.getElementById(`audio-${signal.id}`).textContent.trim());
      const bytes = Uint8Array.from(text, (c) => c.charCodeAt(0));
      this.buffers.set(signal.id, await this.context.decodeAudioData(bytes.buffer));
    }));
  }

  _volume() { return this.volumeDb <= -60 ? 0 : 10 ** (this.volumeDb / 20); }
  _gain(signal) { return signal.id === this.current ? (this.matched ? signal.matched : signal.asItWas) : 0; }

  async play() {
    await this.ready();
    if (this.context.state !== "running") await this.context.resume();
    if (this.playing) return;
    if (this.looping && this.loop && (this.offset < this.loop[0] || this.offset >= this.loop[1])) this.offset = this.loop[0];
    if (this.offset >= this.seconds - 0.01) this.offset = 0;
    this._start();
  }

  _start() {
    const context = this.context;
    const at = context.currentTime + 0.03;
    const repeat = this.looping && this.loop;
    this.began = at;
    this.from = this.offset;
    this.repeat = repeat ? [...this.loop] : null;
    this.seamDone = at;
    this.seam = context.createGain();  // one for each start, so that what is fading out goes on fading
    this.seam.connect(this.master);
    this.seam.gain.value = 0;
    this.seam.gain.setValueAtTime(0, at);
    this.seam.gain.linearRampToValueAtTime(1, at + Player.EDGE_S);
    this.voices = this.signals.map((signal) => {
      const source = context.createBufferSource();
      const gain = context.createGain();
      source.buffer = this.buffers.get(signal.id);
      if (repeat) {
        source.loop = true;
        [source.loopStart, source.loopEnd] = this.repeat;
      }
      gain.gain.value = this._gain(signal);
      source.connect(gain);
      gain.connect(this.seam);
      source.start(at, this.offset);
      return { source, gain };
    });
    this.playing = true;
    this._soften();
    this.timer = setInterval(() => this._tick(), 200);
    this.changed();
  }

  /* Where a loop jumps back, everything is faded out and in within milliseconds: it would click otherwise. */
  _soften() {
    if (!this.repeat) return;
    const length = this.repeat[1] - this.repeat[0];
    const first = this.began + (this.repeat[1] - this.from);
    const now = this.context.currentTime;
    for (let n = Math.max(0, Math.ceil((this.seamDone - first) / length)); ; n += 1) {
      const seam = first + n * length;
      if (seam > now + Player.AHEAD_S + length) break;
      if (seam <= this.seamDone + Player.EDGE_S) continue;
      if (seam - Player.EDGE_S > now) {
        this.seam.gain.setValueAtTime(1, seam - Player.EDGE_S);
        this.seam.gain.linearRampToValueAtTime(0, seam);
        this.seam.gain.linearRampToValueAtTime(1, seam + Player.EDGE_S);
      }
      this.seamDone = seam;
    }
  }

  _tick() {
    this._soften();
    if (!this.repeat && this.position() >= this.seconds) this.stop(0);
  }

  /* Seconds from the first sample, of what is being played now. */
  position() {
    if (!this.playing) return this.offset;
    const past = Math.max(0, this.context.currentTime - this.began);
    const at = this.from + past;
    if (!this.repeat || at < this.repeat[1]) return Math.min(at, this.seconds);
    const [start, stop] = this.repeat;
    return start + ((at - start) % (stop - start));
  }

  stop(offset) {
    if (!this.playing) return;
    this.offset = offset === undefined ? this.position() : offset;
    const now = this.context.currentTime;
    this.seam.gain.cancelScheduledValues(now);
    this.seam.gain.setValueAtTime(this.seam.gain.value, now);
    this.seam.gain.linearRampToValueAtTime(0, now + Player.EDGE_S);
    this.voices.forEach(({ source }) => source.stop(now + 2 * Player.EDGE_S));
    const faded = this.seam;
    setTimeout(() => faded.disconnect(), 100);
    clearInterval(this.timer);
    this.playing = false;
    this.voices = null;
    this.changed();
  }

  /* Stop for good and give the sound device back. */
  close() {
    this.stop();
    if (this.context) this.context.close();
  }

  async toggle() { return this.playing ? this.stop() : this.play(); }

  seek(seconds) {
    const to = Math.min(Math.max(seconds, 0), this.seconds);
    const again = this.playing;
    if (again) this.stop(to);
    this.offset = to;
    if (again) this._start(); else this.changed();
  }

  select(id) {
    if (!this.signals.some((signal) => signal.id === id)) return;
    this.current = id;
    this._fade();
    this.changed();
  }

  match(on) {
    this.matched = on;
    this._fade();
    this.changed();
  }

  volume(db) {
    this.volumeDb = db;
    if (this.master) this.master.gain.setTargetAtTime(this._volume(), this.context.currentTime, 0.02);
  }

  _fade() {
    if (!this.playing) return;
    const now = this.context.currentTime;
    this.signals.forEach((signal, k) => {
      const gain = this.voices[k].gain.gain;
      const held = gain.value;
      gain.cancelScheduledValues(now);
      gain.setValueAtTime(held, now);
      gain.linearRampToValueAtTime(this._gain(signal), now + Player.FADE_S);
    });
  }

  setLoop(start, stop) {
    const [a, b] = [Math.min(start, stop), Math.max(start, stop)];
    this.loop = b - a < 0.1 ? null : [Math.max(0, a), Math.min(this.seconds, b)];
    this.repeatLoop(this.loop !== null);
  }

  repeatLoop(on) {
    this.looping = on && this.loop !== null;
    if (this.playing) {
      const at = this.position();
      this.seek(this.looping && (at < this.loop[0] || at >= this.loop[1]) ? this.loop[0] : at);
    } else this.changed();
  }
}

function clockText(seconds) {
  const minutes = Math.floor(seconds / 60);
  return `${minutes}:${(seconds - 60 * minutes).toFixed(1).padStart(4, "0")}`;
}

/* Binds a player to the controls and pictures inside `root`. Pictures have time to the right, from data-from to data-to.
   Keys work while options.active() is true: several players may share a page. */
function bindTransport(player, root, options = {}) {
  const find = (selector) => root.querySelector(selector);
  const startOfDay = options.startS || 0;
  const playButton = find("[data-play]");
  const slider = find("[data-position]");
  const clock = find("[data-clock]");
  const status = find("[data-status]");
  const lanes = [...root.querySelectorAll("[data-lane]")];
  const active = options.active || (() => true);
  const tell = (text) => { status.textContent = text; };
  let from = null;
  let until = null;

  async function act(work) {
    try { await work(); } catch (error) { tell(`This browser cannot play the sound: ${error.message}`); }
  }
  const startStop = () => act(async () => {
    if (!player.buffers) tell("decoding\u2026");
    await player.toggle();
    tell("");
  });
  playButton.addEventListener("click", startStop);
  slider.max = player.seconds;
  slider.addEventListener("input", () => player.seek(Number(slider.value)));
  root.querySelectorAll("[data-signal]").forEach((radio) => {
    radio.addEventListener("change", () => player.select(radio.value));
  });
  root.querySelectorAll("[data-pick]").forEach((button) => {
    button.addEventListener("click", () => player.select(button.dataset.pick));
  });
  const matched = find("[data-matched]");
  if (matched) matched.addEventListener("change", () => player.match(matched.checked));
  const volume = find("[data-volume]");
  volume.addEventListener("input", () => {
    player.volume(Number(volume.value));
    volume.setAttribute("aria-valuetext", `${volume.value} dB`);
  });
  const loop = find("[data-loop]");
  loop.addEventListener("change", () => {
    if (!player.loop) player.setLoop(player.position(), player.position() + Math.min(3, player.seconds / 3));
    player.repeatLoop(loop.checked);
  });
  const begin = () => {
    from = player.position();
    if (until !== null && until > from) player.setLoop(from, until);
    tell(`loop from ${clockText(startOfDay + from)}`);
  };
  const end = () => {
    until = player.position();
    player.setLoop(from === null ? 0 : from, until);
    tell(player.loop ? `loop ${clockText(startOfDay + player.loop[0])} to ${clockText(startOfDay + player.loop[1])}` : "");
  };
  find("[data-loop-start]").addEventListener("click", begin);
  find("[data-loop-end]").addEventListener("click", end);

  lanes.forEach((lane) => {
    const at = (event) => {
      const box = lane.getBoundingClientRect();
      const share = Math.min(Math.max((event.clientX - box.left) / box.width, 0), 1);
      const [first, last] = [Number(lane.dataset.from || 0), Number(lane.dataset.to || player.seconds)];
      return first + share * (last - first);
    };
    let down = null;
    lane.addEventListener("pointerdown", (event) => { down = [at(event), event.clientX]; });
    lane.addEventListener("pointerup", (event) => {
      if (!down) return;
      if (Math.abs(event.clientX - down[1]) > 8) player.setLoop(down[0], at(event));
      else player.seek(at(event));
      down = null;
    });
    lane.addEventListener("pointercancel", () => { down = null; });
  });

  document.addEventListener("keydown", (event) => {
    const typing = event.target.closest("input:not([type=radio]):not([type=checkbox]), select, textarea, [contenteditable]");
    if (!active() || event.altKey || event.ctrlKey || event.metaKey || typing) return;
    const onButton = event.target.closest("button, a, summary, input");
    const keys = {
      " ": () => startStop(), k: () => startStop(),
      ArrowLeft: () => player.seek(player.position() - (event.shiftKey ? 5 : 1)),
      ArrowRight: () => player.seek(player.position() + (event.shiftKey ? 5 : 1)),
      Home: () => player.seek(player.looping ? player.loop[0] : 0),
      "[": begin, "]": end,
      l: () => { loop.checked = !loop.checked; loop.dispatchEvent(new Event("change")); },
    };
    if (matched) keys.m = () => { matched.checked = !matched.checked; player.match(matched.checked); };
    if (onButton && [" ", "ArrowLeft", "ArrowRight"].includes(event.key)) return;  // these keys are the control's own
    if (/^[1-9]$/.test(event.key)) {
      const signal = player.signals[Number(event.key) - 1];
      if (signal) { player.select(signal.id); event.preventDefault(); }
    } else if (keys[event.key]) {
      keys[event.key]();
      event.preventDefault();
    }
  });

  function draw() {
    const position = player.position();
    slider.value = position;
    slider.setAttribute("aria-valuetext", `${(startOfDay + position).toFixed(1)} seconds`);
    clock.textContent = clockText(startOfDay + position);
    lanes.forEach((lane) => {
      const [first, last] = [Number(lane.dataset.from || 0), Number(lane.dataset.to || player.seconds)];
      lane.style.setProperty("--at", `${(100 * (position - first)) / (last - first)}%`);
    });
  }
  function show() {
    playButton.textContent = player.playing ? "Pause" : "Play";
    loop.checked = player.looping;
    root.querySelectorAll("[data-signal]").forEach((radio) => { radio.checked = radio.value === player.current; });
    root.querySelectorAll("[data-pick]").forEach((button) => {
      button.setAttribute("aria-pressed", String(button.dataset.pick === player.current));
    });
    lanes.forEach((lane) => {
      const [first, last] = [Number(lane.dataset.from || 0), Number(lane.dataset.to || player.seconds)];
      const place = (t) => `${(100 * (t - first)) / (last - first)}%`;
      lane.classList.toggle("looped", player.loop !== null);
      lane.classList.toggle("repeating", player.looping);
      if (player.loop) {
        lane.style.setProperty("--loop-from", place(player.loop[0]));
        lane.style.setProperty("--loop-to", place(player.loop[1]));
      }
    });
    draw();
    if (player.playing) requestAnimationFrame(frame);
  }
  function frame() {
    draw();
    if (player.playing) requestAnimationFrame(frame);
  }
  player.onchange(show);
  show();
}
