// Pictures of the riff and of the sweep. Line style as well as ink tells things apart.
const draw = (() => {
  const LOW_HZ = 20;
  const HIGH_HZ = 20000;

  const inks = () => {
    const style = getComputedStyle(document.documentElement);
    const ink = (name) => style.getPropertyValue(name).trim();
    return { text: ink("--ink"), quiet: ink("--quiet"), line: ink("--line"), card: ink("--card"), warm: ink("--warm"), cool: ink("--cool") };
  };

  // A canvas as large as it is shown; returns its pen, and its size in CSS pixels.
  const open = (canvas) => {
    const scale = window.devicePixelRatio || 1;
    const width = canvas.clientWidth;
    const height = canvas.clientHeight;
    const wide = Math.round(width * scale);
    const high = Math.round(height * scale);
    if (canvas.width !== wide || canvas.height !== high) {
      canvas.width = wide;
      canvas.height = high;
    }
    const pen = canvas.getContext("2d");
    pen.setTransform(scale, 0, 0, scale, 0, 0);
    pen.clearRect(0, 0, width, height);
    pen.font = "12px system-ui, sans-serif";
    return { pen, width, height };
  };

  const extremes = new WeakMap();
  const extremesOf = (buffer, columns) => {
    const known = extremes.get(buffer);
    if (known && known.columns === columns) return known;
    const lows = new Float32Array(columns);
    const highs = new Float32Array(columns);
    const step = buffer.length / columns;
    for (let channel = 0; channel < buffer.numberOfChannels; channel += 1) {
      const samples = buffer.getChannelData(channel);
      for (let column = 0; column < columns; column += 1) {
        const stop = Math.max(Math.floor((column + 1) * step), Math.floor(column * step) + 1);
        for (let i = Math.floor(column * step); i < stop && i < samples.length; i += 1) {
          if (samples[i] < lows[column]) lows[column] = samples[i];
          if (samples[i] > highs[column]) highs[column] = samples[i];
        }
      }
    }
    const found = { columns, lows, highs };
    extremes.set(buffer, found);
    return found;
  };

  const shadeLoop = (pen, ink, loop, across, height) => {
    if (!loop) return;
    pen.save();
    pen.globalAlpha = 0.18;
    pen.fillStyle = ink.warm;
    pen.fillRect(across(loop.from), 0, across(loop.to) - across(loop.from), height);
    pen.restore();
  };

  const playhead = (pen, ink, place, height) => {
    pen.strokeStyle = ink.text;
    pen.lineWidth = 1.5;
    pen.setLineDash([]);
    pen.beginPath();
    pen.moveTo(place, 0);
    pen.lineTo(place, height);
    pen.stroke();
  };

  // The riff as it sounds in one take; buffer null draws an empty strip.
  const wave = (canvas, buffer, seconds, position, loop) => {
    const { pen, width, height } = open(canvas);
    const ink = inks();
    const across = (s) => (s / seconds) * width;
    shadeLoop(pen, ink, loop, across, height);
    if (buffer) {
      const { lows, highs } = extremesOf(buffer, Math.max(1, Math.floor(width)));
      const top = Math.max(0.05, ...highs, ...lows.map((low) => -low));
      pen.fillStyle = ink.quiet;
      for (let x = 0; x < lows.length; x += 1) {
        const high = (highs[x] / top) * 0.94;
        const low = (lows[x] / top) * 0.94;
        pen.fillRect(x, ((1 - high) / 2) * height, 1, Math.max(1, ((high - low) / 2) * height));
      }
    }
    playhead(pen, ink, across(position), height);
  };

  const placeIn = (cycle, points, seconds) => ((seconds % cycle.period) / cycle.period) * points;
  const stopped = (cycle, stage, seconds) => {
    const track = cycle.stopped[stage];
    return track[Math.floor(placeIn(cycle, track.length, seconds)) % track.length] === "1";
  };
  // Straight lines between the cycle's instants; nothing next to nothing.
  const at = (cycle, track, seconds) => {
    const place = placeIn(cycle, track.length, seconds);
    const before = Math.floor(place);
    const [low, high] = [track[before % track.length], track[(before + 1) % track.length]];
    return low === null || high === null ? null : low + (place - before) * (high - low);
  };

  const trace = (pen, values) => {
    pen.beginPath();
    let down = false;
    for (const [x, y] of values) {
      if (y === null) down = false;
      else if (down) pen.lineTo(x, y);
      else {
        pen.moveTo(x, y);
        down = true;
      }
    }
    pen.stroke();
  };

  const LEFT = 46;
  const FOOT = 20;

  // Notch tracks of the take that plays and of the compared one; the stages' break
  // frequencies of the first, crosses where a stage has stopped.
  const sweep = (canvas, now, other, { seconds, start, position, loop }, withStages) => {
    const { pen, width, height } = open(canvas);
    const ink = inks();
    const across = (s) => LEFT + (s / seconds) * (width - LEFT - 4);
    const bottom = height - FOOT;
    const up = (hz) =>
      hz === null || hz < LOW_HZ || hz > HIGH_HZ
        ? null
        : bottom - (Math.log(hz / LOW_HZ) / Math.log(HIGH_HZ / LOW_HZ)) * (bottom - 4);
    shadeLoop(pen, ink, loop, across, bottom);
    pen.lineWidth = 1;
    pen.strokeStyle = ink.line;
    pen.fillStyle = ink.text;
    pen.textAlign = "right";
    pen.textBaseline = "middle";
    for (const [hz, name] of [[50, "50 Hz"], [100, "100"], [200, "200"], [500, "500"], [1000, "1k"], [2000, "2k"], [5000, "5k"], [10000, "10k"]]) {
      pen.beginPath();
      pen.moveTo(LEFT, up(hz));
      pen.lineTo(width - 4, up(hz));
      pen.stroke();
      pen.fillText(name, LEFT - 5, up(hz));
    }
    pen.textAlign = "center";
    pen.textBaseline = "alphabetic";
    const step = [0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300].find((s) => seconds / s <= width / 60) || 600;
    for (let s = 0; s <= seconds + 1e-9; s += step) {
      const label = `${Number((s + start).toFixed(1))} s`;
      pen.fillText(label, Math.min(Math.max(across(s), LEFT), width - 22), height - 5);
    }
    const columns = Math.max(2, Math.floor(width - LEFT - 4));
    const path = (cycle, track) =>
      Array.from({ length: columns + 1 }, (_, column) => {
        const s = (column / columns) * seconds;
        return [across(s), up(at(cycle, track, s + start))];
      });
    if (now && withStages) {
      now.breaks.forEach((track, stage) => {
        pen.strokeStyle = ink.quiet;
        pen.lineWidth = 1;
        pen.setLineDash([[], [6, 3], [2, 3], [9, 3, 2, 3]][stage % 4]);
        const line = path(now, track);
        trace(pen, line);
        pen.setLineDash([]);
        pen.strokeStyle = ink.text;
        line.forEach(([x, y], column) => {
          if (column % 9 || y === null) return;
          const s = (column / columns) * seconds + start;
          if (!stopped(now, stage, s)) return;
          pen.beginPath();
          pen.moveTo(x - 3, y - 3);
          pen.lineTo(x + 3, y + 3);
          pen.moveTo(x - 3, y + 3);
          pen.lineTo(x + 3, y - 3);
          pen.stroke();
        });
        // The stage's number on its line, each at another place so that they stay apart.
        const [x, y] = line[Math.round(((stage + 0.5) / now.breaks.length) * columns)];
        if (y === null) return;
        pen.strokeStyle = ink.card;
        pen.lineWidth = 5;
        pen.fillStyle = ink.text;
        pen.textAlign = "center";
        pen.textBaseline = "middle";
        pen.strokeText(String(stage + 1), x, y);
        pen.fillText(String(stage + 1), x, y);
      });
    }
    if (other) {
      pen.strokeStyle = ink.cool;
      pen.lineWidth = 2;
      pen.setLineDash([7, 4]);
      for (const track of other.notches) trace(pen, path(other, track));
    }
    if (now) {
      pen.strokeStyle = ink.warm;
      pen.lineWidth = 3;
      pen.setLineDash([]);
      for (const track of now.notches) trace(pen, path(now, track));
    }
    playhead(pen, ink, across(position), bottom);
  };

  return Object.freeze({ wave, sweep, LEFT });
})();
