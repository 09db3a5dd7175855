// The blind trial. What is hidden lives in this closure and goes nowhere else before the end.
const makeTrial = (rounds, first, second) => {
  const drawn = new Uint8Array(rounds);
  crypto.getRandomValues(drawn);
  const hidden = Array.from(drawn, (byte) => byte & 1);
  const answers = [];
  let heard = false;

  return Object.freeze({
    rounds,
    first,
    second,
    // Numbers of the takes for the three voices of the round to come.
    voices: () => [first, second, hidden[answers.length] ? second : first],
    round: () => answers.length + 1,
    hear: (voice) => {
      heard = heard || voice === 2;
    },
    // An answer counts once the hidden take has been heard in its round; says whether it did.
    answer: (choice) => {
      if (!heard || answers.length >= rounds) return false;
      answers.push(choice);
      heard = false;
      return true;
    },
    over: () => answers.length >= rounds,
    // Only a finished trial has a result.
    result: () => {
      if (answers.length < rounds) return null;
      const right = answers.filter((choice, i) => choice === hidden[i]).length;
      const need = arithmetic.needed(rounds, 0.05, 0.5);
      return {
        rounds,
        right,
        chance: arithmetic.tail(rounds, right, 0.5),
        interval: arithmetic.interval(rounds, right, 0.95),
        need,
        power: [0.6, 0.7, 0.8, 0.9].map((rate) => [rate, arithmetic.tail(rounds, need, rate)]),
        log: answers.map((choice, i) => ({ round: i + 1, hidden: hidden[i], answer: choice })),
      };
    },
  });
};

const trialText = {
  percent: (share) => `${(100 * share).toFixed(1)} %`,

  chance: (chance) => (chance < 0.0001 ? "less than 0.0001" : chance.toFixed(4)),

  verdict: (result) => {
    const { right, rounds, need, chance } = result;
    const told = `${right} of ${rounds} right. Guessing alone gets as many or more with probability ${trialText.chance(chance)}`;
    return right >= need
      ? `${told}: hardly luck. You told these two takes apart, here and today.`
      : `${told}: that can well be luck. This does not show that there is nothing to hear.`;
  },

  details: (result) => {
    const [low, high] = result.interval;
    const [[rate, chance], ...more] = result.power;
    const power = [
      `a listener truly right ${Math.round(100 * rate)} % of the time reaches ${result.need} of ${result.rounds} in ${trialText.percent(chance)} of trials`,
      ...more.map(([higher, often]) => `at ${Math.round(100 * higher)} % in ${trialText.percent(often)}`),
    ].join("; ");
    return [
      `Your true rate of right answers lies between ${trialText.percent(low)} and ${trialText.percent(high)} (exact interval, 95 % confidence; guessing is 50 %).`,
      `The rule was fixed before the start: ${result.need} or more right of ${result.rounds} counts (probability by guessing at most 5 %).`,
      `How little a miss proves: ${power}.`,
    ];
  },

  // Text that a spreadsheet would run as a formula gets an apostrophe before it.
  cell: (value) => {
    let text = String(value).replace(/[\r\n\t]/g, " ");
    if (/^[=+\-@]/.test(text) && Number.isNaN(Number(text))) text = `'${text}`;
    return /[",;]/.test(text) ? `"${text.replace(/"/g, '""')}"` : text;
  },

  csv: (title, question, names, result) => {
    const row = (...cells) => cells.map(trialText.cell).join(",");
    const [low, high] = result.interval;
    return [
      row("figure", "value"),
      row("riff", title),
      row("question", question),
      row("first take", names[0]),
      row("second take", names[1]),
      row("saved", new Date().toISOString()),
      row("rounds", result.rounds),
      row("right", result.right),
      row("needed", result.need),
      row("probability by guessing", result.chance),
      row("rate, 95 % interval, low", low),
      row("rate, 95 % interval, high", high),
      ...result.power.map(([rate, chance]) => row(`probability of reaching it at a true rate of ${rate}`, chance)),
      "",
      row("round", "hidden", "answer", "right"),
      ...result.log.map(({ round, hidden, answer }) =>
        row(round, hidden ? "second" : "first", answer ? "second" : "first", hidden === answer ? "yes" : "no"),
      ),
      "",
    ].join("\r\n");
  },
};
