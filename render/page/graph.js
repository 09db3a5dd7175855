// How takes are joined to the output; the same functions serve the ear and the tests.
const graph = (() => {
  // Gains move with this time constant [s]: click-free, and together they stay one.
  const SWITCH_S = 0.004;
  // A loop's last frames lean over to what comes before its first ones, over this time [s].
  const SEAM_S = 0.012;
  // In a trial every change goes through a silence this long [s], by then below -60 dB. A
  // blend of two takes can be heard although the takes themselves cannot be told apart,
  // and there would be none where the hidden take is the one that played.
  const SILENCE_S = 0.03;

  // One source and one gain a buffer, all into one node; nothing sounds yet.
  const wire = (context, buffers, target) =>
    buffers.map((buffer) => {
      const source = context.createBufferSource();
      const gain = context.createGain();
      source.buffer = buffer;
      gain.gain.value = 0;
      source.connect(gain).connect(target);
      return { source, gain };
    });

  // A loop of whole frames: between frames the browser would interpolate.
  const wholeFrames = (loop, rate) => ({
    from: Math.round(loop.from * rate) / rate,
    to: Math.round(loop.to * rate) / rate,
  });

  const start = (voices, when, offset, loop) => {
    for (const { source } of voices) {
      if (loop) {
        source.loop = true;
        source.loopStart = loop.from;
        source.loopEnd = loop.to;
      }
      source.start(when, offset);
    }
  };

  const choose = (voices, number, when, throughSilence) => {
    voices.forEach(({ gain }, place) => {
      // A change asked for during another's silence takes its place.
      gain.gain.cancelScheduledValues(when);
      if (throughSilence || place !== number) gain.gain.setTargetAtTime(0, when, SWITCH_S);
      if (place !== number) return;
      gain.gain.setTargetAtTime(1, when + (throughSilence ? SILENCE_S : 0), SWITCH_S);
    });
  };

  // Blend a loop's seam in place; returns a function that takes the blend out again.
  const blendSeam = (buffer, loop) => {
    const rate = buffer.sampleRate;
    const from = Math.round(loop.from * rate);
    const to = Math.round(loop.to * rate);
    const length = Math.min(Math.round(SEAM_S * rate), to - from);
    const kept = [];
    for (let channel = 0; channel < buffer.numberOfChannels; channel += 1) {
      const samples = buffer.getChannelData(channel);
      kept.push(samples.slice(to - length, to));
      for (let i = 0; i < length; i += 1) {
        const share = (i + 1) / (length + 1);
        const before = from - length + i;
        const lead = before >= 0 ? samples[before] : 0;
        const place = to - length + i;
        samples[place] = (1 - share) * samples[place] + share * lead;
      }
    }
    return () => {
      kept.forEach((samples, channel) => {
        buffer.getChannelData(channel).set(samples, to - length);
      });
    };
  };

  return Object.freeze({ wire, wholeFrames, start, choose, blendSeam, SWITCH_S, SEAM_S, SILENCE_S });
})();
