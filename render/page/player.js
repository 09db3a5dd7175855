// Plays one of several buffers, all running at once, sample beside sample.
class Player {
  constructor(rate, seconds) {
    this.rate = rate;
    this.seconds = seconds;
    this.buffers = [];
    this.voice = 0;
    this.loop = null;
    this.playing = false;
    this.throughSilence = false; // how a change of voice sounds, see graph.choose
    this.levelDb = -20;
    this.rest = 0; // where it stands while silent [s]
    this.unblend = [];
    this.voices = [];
  }

  // The live context is made at the listener's first gesture, not before.
  wake() {
    if (!this.context) {
      this.context = new AudioContext({ sampleRate: this.rate });
      this.master = this.context.createGain();
      this.master.gain.value = 0;
      this.master.connect(this.context.destination);
    }
    this.setLevel(this.levelDb);
    this.context.resume();
  }

  setLevel(db) {
    this.levelDb = db;
    if (!this.context) return;
    const gain = db <= -60 ? 0 : 10 ** (db / 20);
    this.master.gain.setTargetAtTime(gain, this.context.currentTime, 0.02);
  }

  // Take other buffers in, going on at the same place.
  load(buffers, voice) {
    const position = this.position();
    const running = this.playing;
    this.halt();
    this.mend();
    this.buffers = buffers;
    this.voice = voice;
    this.rest = position;
    this.blend();
    if (running) this.begin();
  }

  blend() {
    if (!this.loop) return;
    // The hidden take of a trial is a buffer that is there already: blended once.
    this.unblend = [...new Set(this.buffers)].map((one) => graph.blendSeam(one, this.loop));
  }

  mend() {
    for (const undo of this.unblend) undo();
    this.unblend = [];
  }

  begin() {
    if (this.playing || !this.buffers.length) return;
    let offset = this.rest;
    if (this.loop && (offset < this.loop.from || offset >= this.loop.to)) offset = this.loop.from;
    if (offset >= this.seconds - 0.01) offset = 0;
    this.context.resume(); // a telephone call may have put it to sleep
    const when = this.context.currentTime + 0.03;
    this.bus = this.context.createGain();
    this.bus.gain.value = 0;
    this.bus.gain.setValueAtTime(0, when);
    this.bus.gain.setTargetAtTime(1, when, graph.SWITCH_S);
    this.bus.connect(this.master);
    this.voices = graph.wire(this.context, this.buffers, this.bus);
    this.voices[this.voice].gain.gain.value = 1;
    graph.start(this.voices, when, offset, this.loop);
    this.from = { when, offset };
    this.playing = true;
    const voices = this.voices;
    voices[0].source.onended = () => {
      if (this.voices === voices && this.playing && !this.loop) {
        this.halt();
        this.rest = 0;
        if (this.onend) this.onend();
      }
    };
  }

  halt() {
    if (!this.playing) return;
    this.rest = this.position();
    this.playing = false;
    const bus = this.bus;
    const now = this.context.currentTime;
    bus.gain.cancelScheduledValues(now);
    bus.gain.setTargetAtTime(0, now, graph.SWITCH_S);
    for (const { source } of this.voices) source.stop(now + 0.06);
    this.voices = [];
  }

  choose(voice) {
    this.voice = voice;
    if (!this.playing) return;
    graph.choose(this.voices, voice, this.context.currentTime, this.throughSilence);
  }

  seek(seconds) {
    const running = this.playing;
    this.halt();
    this.rest = Math.min(Math.max(seconds, 0), this.seconds);
    if (running) this.begin();
  }

  setLoop(loop) {
    const running = this.playing;
    this.halt();
    this.mend();
    this.loop = loop && graph.wholeFrames(loop, this.rate);
    this.blend();
    if (running) this.begin();
  }

  position() {
    if (!this.playing) return this.rest;
    const { when, offset } = this.from;
    const ran = Math.max(0, this.context.currentTime - when) + offset;
    if (!this.loop) return Math.min(ran, this.seconds);
    const { from, to } = this.loop;
    return ran < to ? ran : from + ((ran - from) % (to - from));
  }
}
