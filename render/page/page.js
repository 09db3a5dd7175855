// Joins the page's controls, the player, the pictures and the trial.
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const byId = (id) => document.getElementById(id);
  const player = new Player(data.rate, data.seconds);
  const calm = matchMedia("(prefers-reduced-motion: reduce)");
  let buffers = [];
  // The first pair that something is said of, else the first two takes.
  const [pair] = data.pairs;
  let now = pair ? pair.first : Math.min(1, data.takes.length - 1);
  let other = pair ? pair.second : 0;
  let loopStart = null;
  let trial = null;

  const add = (parent, tag, text, settings = {}) => {
    const made = document.createElement(tag);
    if (text !== undefined) made.textContent = text;
    Object.assign(made, settings);
    parent.append(made);
    return made;
  };
  const time = (seconds) => `${seconds.toFixed(1)} s`;

  // --- unpacking -----------------------------------------------------------------------
  const bytesOf = (text) => {
    if (Uint8Array.fromBase64) return Uint8Array.fromBase64(text);
    const packed = atob(text);
    const bytes = new Uint8Array(packed.length);
    for (let i = 0; i < packed.length; i += 1) bytes[i] = packed.charCodeAt(i);
    return bytes;
  };
  const unpack = async () => {
    // At the takes' own rate: nothing is resampled, and no gesture is needed.
    const context = new OfflineAudioContext(data.channels, 1, data.rate);
    const texts = data.takes.map((_, n) => byId(`take-${n}`));
    return Promise.all(
      texts.map(async (node) => {
        const bytes = bytesOf(node.textContent.trim());
        node.remove();
        return context.decodeAudioData(bytes.buffer);
      }),
    );
  };

  // --- pictures ------------------------------------------------------------------------
  let stale = true;
  const paint = () => {
    const position = player.position();
    const blind = trial !== null;
    // In a trial the first of the two named takes is drawn, whatever plays.
    draw.wave(byId("wave"), buffers[blind ? trial.first : now], data.seconds, position, player.loop);
    if (!blind && !byId("sweep-part").hidden) {
      const shown = data.takes[now].cycle;
      const against = other === now ? null : data.takes[other].cycle;
      const place = { seconds: data.seconds, start: data.start, position, loop: player.loop };
      draw.sweep(byId("sweep"), shown, against, place, byId("stages").checked);
    }
    byId("clock").textContent = `${time(position + data.start)} of ${time(data.seconds + data.start)}`;
    const seek = byId("seek");
    if (document.activeElement !== seek || player.playing) seek.value = position;
    seek.setAttribute("aria-valuetext", time(position + data.start));
  };
  let painted = 0;
  const animate = (stamp) => {
    const every = calm.matches ? 250 : 0;
    if ((player.playing && stamp - painted >= every) || stale) {
      paint();
      painted = stamp;
      stale = false;
    }
    requestAnimationFrame(animate);
  };

  // --- takes ---------------------------------------------------------------------------
  const showState = () => {
    const doing = player.playing ? "Playing" : "Ready";
    byId("play").textContent = player.playing ? "Stop" : "Play";
    if (trial === null) {
      const against = other === now ? "" : `, against ${data.takes[other].name}`;
      byId("state").textContent = `${doing}: ${data.takes[now].name}${against}.`;
    }
    stale = true;
  };
  const showFacts = () => {
    const table = byId("figures");
    table.replaceChildren();
    const columns = other === now ? [now] : [now, other];
    const head = add(add(table, "thead"), "tr");
    add(head, "th", "");
    columns.forEach((n, place) => add(head, "th", `${place ? "against: " : ""}${data.takes[n].name}`, { scope: "col" }));
    const body = add(table, "tbody");
    const names = [...new Set(columns.flatMap((n) => data.takes[n].facts.map(([name]) => name)))];
    for (const name of names) {
      const line = add(body, "tr");
      add(line, "th", name, { scope: "row" });
      for (const n of columns) {
        const found = data.takes[n].facts.find(([fact]) => fact === name);
        add(line, "td", found ? found[1] : "");
      }
    }
    const known = data.pairs.find((one) => (one.first === now && one.second === other) || (one.first === other && one.second === now));
    byId("pair").textContent = known ? known.sentence : "";
    const moments = byId("moments");
    moments.replaceChildren();
    const here = known ? known.moments.filter((s) => s >= data.start && s <= data.start + data.seconds) : [];
    if (here.length) {
      add(moments, "span", "Listen at");
      for (const moment of here) {
        add(moments, "button", time(moment)).addEventListener("click", () => {
          player.seek(moment - data.start - 1);
          stale = true;
        });
      }
    }
    const shown = data.takes[now].cycle || data.takes[other].cycle;
    byId("sweep-part").hidden = !shown;
    byId("sweep").setAttribute(
      "aria-label",
      `Notch tracks over the riff, 20 Hz to 20 kHz: ${data.takes[now].name}${other === now ? "" : ` against ${data.takes[other].name}`}.`,
    );
  };
  // Within the list only: the page itself stays where the listener has put it.
  const keepInSight = (line) => {
    const list = byId("takes");
    const [inner, outer] = [line.getBoundingClientRect(), list.getBoundingClientRect()];
    if (inner.top < outer.top) list.scrollTop -= outer.top - inner.top;
    if (inner.bottom > outer.bottom) list.scrollTop += inner.bottom - outer.bottom;
  };
  const mark = () => {
    document.querySelectorAll("#takes button").forEach((button, n) => {
      button.setAttribute("aria-pressed", String(n === now));
      if (n === now) keepInSight(button.parentElement);
    });
    document.querySelectorAll("#takes input").forEach((radio, n) => {
      radio.checked = n === other;
    });
    showFacts();
    showState();
  };
  const hear = (number) => {
    if (number < 0 || number >= data.takes.length) return;
    // To play the one set against means to change the two about.
    if (number === other) other = now;
    now = number;
    player.choose(now);
    mark();
  };
  const against = (number) => {
    if (number !== now) other = number; // a take against itself shows nothing
    mark();
  };
  const swap = () => {
    if (other === now) return;
    [now, other] = [other, now];
    player.choose(now);
    mark();
  };

  // --- transport -----------------------------------------------------------------------
  const toggle = () => {
    if (player.playing) player.halt();
    else player.begin();
    showState();
  };
  player.onend = showState;
  const showLoop = () => {
    const { loop } = player;
    byId("loop-off").disabled = !loop && loopStart === null;
    byId("loop-text").textContent = loop
      ? `Repeating ${time(loop.from + data.start)} to ${time(loop.to + data.start)}`
      : loopStart !== null
        ? `From ${time(loopStart + data.start)}, to where?`
        : "The whole riff, once";
    stale = true;
  };
  const loopFrom = () => {
    loopStart = player.position();
    player.setLoop(null);
    showLoop();
  };
  const loopTo = () => {
    const end = player.position();
    const from = Math.min(loopStart ?? 0, end);
    const to = Math.max(loopStart ?? 0, end);
    loopStart = null;
    // Shorter than this is a tone, not a stretch of music.
    player.setLoop(to - from >= 0.1 ? { from, to } : null);
    showLoop();
  };
  const loopOff = () => {
    loopStart = null;
    player.setLoop(null);
    showLoop();
  };
  const move = (seconds) => {
    player.seek(player.position() + seconds);
    stale = true;
  };

  // --- blind trial ---------------------------------------------------------------------
  let result = null;
  let asked = "";
  const panels = ["trial-set", "trial-run", "trial-end"];
  const showPanel = (name) => {
    for (const panel of panels) byId(panel).hidden = panel !== name;
    const blind = name === "trial-run";
    byId("bench").classList.toggle("blind", blind);
    for (const id of ["side", "sweep-part"]) byId(id).hidden = blind;
  };
  const showRule = () => {
    const rounds = Number(byId("trial-rounds").value);
    const fine = Number.isInteger(rounds) && rounds >= 5 && rounds <= 50;
    byId("trial-rule").textContent = fine
      ? `Rule: ${arithmetic.needed(rounds, 0.05, 0.5)} or more right of ${rounds} will count as told apart; guessing gets there at most once in twenty trials.`
      : "Give a whole number of rounds from 5 to 50.";
    return fine;
  };
  const showRound = (hint) => {
    const text = `Round ${trial.round()} of ${trial.rounds}.${hint}`;
    // Said again only when it changes, or a screen reader would repeat it.
    if (byId("trial-round").textContent !== text) byId("trial-round").textContent = text;
  };
  const hearVoice = (voice) => {
    trial.hear(voice);
    showRound("");
    player.choose(voice);
    if (!player.playing) player.begin();
    for (let n = 0; n < 3; n += 1) byId(`hear-${n}`).setAttribute("aria-pressed", String(n === voice));
    showState();
  };
  const nextRound = () => {
    player.load(trial.voices().map((n) => buffers[n]), 0);
    for (let n = 0; n < 3; n += 1) byId(`hear-${n}`).setAttribute("aria-pressed", String(n === 0));
    showRound("");
    showState();
  };
  const leave = () => {
    trial = null;
    player.throughSilence = false;
    player.load(buffers, now);
    mark();
  };
  const startTrial = () => {
    const first = Number(byId("trial-first").value);
    const second = Number(byId("trial-second").value);
    byId("trial-fault").textContent = "";
    if (!showRule()) return;
    if (first === second) {
      byId("trial-fault").textContent = "Choose two different takes.";
      return;
    }
    trial = makeTrial(Number(byId("trial-rounds").value), first, second);
    asked = `Which one is hidden: the first (${data.takes[first].name}) or the second (${data.takes[second].name})?`;
    byId("trial-question").textContent = asked;
    player.throughSilence = true;
    showPanel("trial-run");
    nextRound();
    byId("hear-0").focus();
  };
  const say = (choice) => {
    if (!trial.answer(choice)) {
      showRound(" Hear the hidden one first.");
      return;
    }
    if (!trial.over()) {
      nextRound();
      return;
    }
    player.halt();
    result = { ...trial.result(), first: trial.first, second: trial.second };
    byId("trial-verdict").textContent = trialText.verdict(result);
    const list = byId("trial-details");
    list.replaceChildren();
    for (const sentence of trialText.details(result)) add(list, "li", sentence);
    leave();
    showPanel("trial-end");
    mark();
    byId("trial-save").focus();
  };
  const giveUp = () => {
    leave();
    showPanel("trial-set");
    mark();
    byId("trial-fault").textContent = "The trial was given up; a part of a trial has no result.";
    byId("trial-start").focus();
  };
  const save = () => {
    const names = [data.takes[result.first].name, data.takes[result.second].name];
    const text = trialText.csv(data.title, asked, names, result);
    const url = URL.createObjectURL(new Blob([text], { type: "text/csv" }));
    const link = document.createElement("a");
    link.href = url;
    link.download = "blind_trial.csv";
    link.click();
    setTimeout(() => URL.revokeObjectURL(url), 10000);
  };

  // --- keys ----------------------------------------------------------------------------
  const keys = (event) => {
    if (event.ctrlKey || event.altKey || event.metaKey || byId("bench").hidden) return;
    const { target, key } = event;
    const typing = target.matches("select, input[type=number]");
    const sliding = target.matches("input[type=range]");
    if (typing) return;
    const pressing = target.matches("button, input[type=checkbox], input[type=radio]");
    const low = key.toLowerCase();
    const acts = {
      "[": loopFrom,
      "]": loopTo,
      l: loopOff,
    };
    if (!pressing) acts[" "] = toggle;
    if (!sliding && !target.matches("input[type=radio]")) {
      acts.home = () => player.seek(0);
      acts.arrowleft = () => move(-1);
      acts.arrowright = () => move(1);
    }
    if (trial === null) {
      Object.assign(acts, { n: () => hear(now + 1), p: () => hear(now - 1), b: swap });
      if (/^[1-9]$/.test(key)) acts[key] = () => hear(Number(key) - 1);
    } else {
      Object.assign(acts, { 1: () => hearVoice(0), 2: () => hearVoice(1), 3: () => hearVoice(2) });
      Object.assign(acts, { f: () => say(0), s: () => say(1) });
    }
    const act = acts[low];
    if (!act) return;
    event.preventDefault();
    // A key held down moves on, but answers, plays and marks once.
    if (event.repeat && !["arrowleft", "arrowright", "n", "p"].includes(low)) return;
    act();
    stale = true;
  };

  // --- putting it up -------------------------------------------------------------------
  const build = () => {
    document.title = `${data.title}: listening page`;
    byId("title").textContent = data.title;
    byId("about").textContent = data.about;
    if (data.notice) {
      byId("notice").textContent = data.notice;
      byId("notice").hidden = false;
    }
    for (const caution of data.cautions) add(byId("cautions"), "li", caution);
    data.takes.forEach((take, n) => {
      const line = add(byId("takes"), "li");
      const button = add(line, "button", `${n + 1}  ${take.name}`);
      button.addEventListener("click", () => hear(n));
      const label = add(line, "label", undefined);
      const radio = add(label, "input", undefined, { type: "radio", name: "against", value: String(n) });
      radio.setAttribute("aria-label", `set against ${take.name}`);
      radio.addEventListener("change", () => against(n));
      add(label, "span", "against").setAttribute("aria-hidden", "true");
      for (const id of ["trial-first", "trial-second"]) {
        add(byId(id), "option", take.name, { value: String(n) });
      }
    });
    byId("trial-first").value = String(now);
    byId("trial-second").value = String(other);
    byId("trial").hidden = data.takes.length < 2;
    byId("seek").max = data.seconds;
    // A reloaded page may come with the old places of its sliders; the sound does not.
    for (const [id, value] of [["seek", 0], ["level", player.levelDb], ["trial-rounds", 16]]) byId(id).value = value;
    byId("stages").checked = true;
    const on = (id, event, act) => byId(id).addEventListener(event, act);
    on("play", "click", toggle);
    on("seek", "input", () => player.seek(Number(byId("seek").value)));
    on("level", "input", () => {
      const db = Number(byId("level").value);
      player.setLevel(db);
      byId("level-db").textContent = db <= -60 ? "silent" : `${db} dB`;
    });
    on("loop-from", "click", loopFrom);
    on("loop-to", "click", loopTo);
    on("loop-off", "click", loopOff);
    on("stages", "change", () => { stale = true; });
    on("wave", "click", (event) => {
      player.seek((event.offsetX / byId("wave").clientWidth) * data.seconds);
      stale = true;
    });
    on("sweep", "click", (event) => {
      const wide = byId("sweep").clientWidth - draw.LEFT - 4;
      player.seek(((event.offsetX - draw.LEFT) / wide) * data.seconds);
      stale = true;
    });
    on("trial-rounds", "input", showRule);
    on("trial-start", "click", startTrial);
    for (let n = 0; n < 3; n += 1) on(`hear-${n}`, "click", () => hearVoice(n));
    for (let n = 0; n < 2; n += 1) on(`say-${n}`, "click", () => say(n));
    on("trial-stop", "click", giveUp);
    on("trial-save", "click", save);
    on("trial-again", "click", () => {
      showPanel("trial-set");
      mark();
    });
    document.addEventListener("keydown", keys);
    new ResizeObserver(() => { stale = true; }).observe(document.body);
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => { stale = true; });
    showRule();
  };

  build();
  unpack().then(
    (found) => {
      buffers = found;
      byId("loading").textContent = `${found.length} takes of ${time(data.seconds)} are ready.`;
      byId("ready").disabled = false;
      byId("ready").addEventListener("click", () => {
        try {
          player.wake();
        } catch {
          byId("loading").textContent = `This browser cannot play at ${data.rate} Hz. The WAV files beside this page hold the same sound.`;
          return;
        }
        byId("before").hidden = true;
        byId("bench").hidden = false;
        player.load(buffers, now);
        mark();
        byId("play").focus();
        requestAnimationFrame(animate);
      });
    },
    () => {
      byId("loading").textContent =
        "This browser could not unpack the takes. The WAV files beside this page hold the same sound.";
    },
  );
  // Pure functions, for whoever wants to check them; nothing of a running trial is here.
  window.sweepset = Object.freeze({ arithmetic, graph, trialText });
})();
