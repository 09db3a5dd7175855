// Exact binomial arithmetic of the blind trial; pure functions.
const arithmetic = (() => {
  // ln of n over k, by its product; n up to some thousands.
  const lnChoose = (n, k) => {
    let sum = 0;
    for (let i = 1; i <= Math.min(k, n - k); i += 1) sum += Math.log((n - i + 1) / i);
    return sum;
  };
  const mass = (n, k, rate) => {
    if (rate <= 0) return k === 0 ? 1 : 0;
    if (rate >= 1) return k === n ? 1 : 0;
    return Math.exp(lnChoose(n, k) + k * Math.log(rate) + (n - k) * Math.log1p(-rate));
  };
  // Chance of k or more of n right at a rate; summed from the small end.
  const tail = (n, k, rate) => {
    if (k <= 0) return 1;
    let sum = 0;
    for (let i = n; i >= k; i -= 1) sum += mass(n, i, rate);
    return Math.min(1, sum);
  };
  // Least number right that chance reaches with at most this probability; null if none.
  const needed = (n, level, rate) => {
    for (let k = 0; k <= n; k += 1) if (tail(n, k, rate) <= level) return k;
    return null;
  };
  const solve = (rises, target) => {
    let low = 0;
    let high = 1;
    for (let i = 0; i < 200; i += 1) {
      const middle = (low + high) / 2;
      if (rises(middle) < target) low = middle;
      else high = middle;
    }
    return (low + high) / 2;
  };
  // Exact interval of the rate after C. J. Clopper and E. S. Pearson (1934).
  const interval = (n, k, confidence) => {
    const side = (1 - confidence) / 2;
    return [
      k === 0 ? 0 : solve((rate) => tail(n, k, rate), side),
      k === n ? 1 : solve((rate) => tail(n, k + 1, rate), 1 - side),
    ];
  };
  return Object.freeze({ tail, needed, interval });
})();
