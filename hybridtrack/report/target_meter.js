// Refreshes counted from the stamps of requestAnimationFrame: rate with its deviation, spread, and those missed.
//
// Stamps are numbered by rounding each interval to whole refreshes; a line through stamps against numbers gives the
// rate. A number left out is a refresh for which this page drew nothing.
class RefreshMeter {
  constructor(start = 30) {
    this.start = start; // intervals whose median tells one refresh
    this.first = [];
    this.period = null; // ms
    this.index = 0;
    this.last = null;
    this.dropped = 0;
    this.crowded = 0; // two stamps within one refresh
    this.n = 0;
    this.sums = { k: 0, kk: 0, r: 0, rr: 0, kr: 0 };
    this.recent = []; // [stamp, interval] of the last ten seconds
    this.off = { n: 0, sum: 0, squares: 0 };
  }

  add(stamp) {
    if (this.period === null) {
      this.first.push(stamp);
      if (this.first.length <= this.start) return;
      const steps = this.first.slice(1).map((t, i) => t - this.first[i]).sort((a, b) => a - b);
      this.period = this.guess = steps[steps.length >> 1];
      this.origin = this.first[0];
      for (const t of this.first) this.take(t);
      this.first = [];
      return;
    }
    this.take(stamp);
  }

  take(stamp) {
    if (this.last !== null) {
      const interval = stamp - this.last;
      const steps = Math.round(interval / this.period);
      this.index += steps;
      if (steps > 1) this.dropped += steps - 1;
      if (steps < 1) this.crowded += 1;
      const off = interval - steps * this.period;
      this.off.n += 1;
      this.off.sum += off;
      this.off.squares += off * off;
      this.recent.push([stamp, interval]);
      while (this.recent.length > 2 && stamp - this.recent[0][0] > 10000) this.recent.shift();
    }
    this.last = stamp;
    // Residuals against the first guess stay small, and sums of their squares exact.
    const k = this.index, r = stamp - this.origin - k * this.guess, s = this.sums;
    this.n += 1;
    s.k += k; s.kk += k * k; s.r += r; s.rr += r * r; s.kr += k * r;
    if (this.n % 64 === 0) this.period = this.line().period;
  }

  line() {
    const { k, kk, r, rr, kr } = this.sums, n = this.n;
    const across = kk - k * k / n, slope = (kr - k * r / n) / across;
    const rest = Math.max(0, rr - r * r / n - slope * slope * across);
    return { period: this.guess + slope, sigma: Math.sqrt(rest / Math.max(1, n - 2) / across) };
  }

  get ready() { return this.period !== null && this.n > this.start; }

  reading() {
    const { period, sigma } = this.line();
    const mean = this.off.sum / this.off.n;
    const spread = Math.sqrt(Math.max(0, this.off.squares / this.off.n - mean * mean));
    const seconds = (this.last - this.origin) / 1000;
    const hz = 1000 / period;
    return { hz, sigmaHz: hz * sigma / period, spreadMs: spread, periodMs: period, seconds,
             refreshes: this.index, dropped: this.dropped, crowded: this.crowded };
  }
}

// Steady: nothing missed over at least two seconds, and intervals spread by less than a tenth of a refresh.
function verdictOf(reading) {
  if (reading.seconds < 2) return { steady: false, known: false, words: "not known to be steady yet: less than two seconds were measured" };
  if (reading.dropped > 0) return { steady: false, known: true, words: `NOT steady: ${reading.dropped} of ${reading.refreshes} refreshes were missed` };
  if (reading.crowded > 0 || reading.spreadMs > 0.1 * reading.periodMs)
    return { steady: false, known: true, words: `NOT steady: intervals spread by ${reading.spreadMs.toFixed(2)} ms of ${reading.periodMs.toFixed(2)} ms` };
  return { steady: true, known: true, words: `steady: none of ${reading.refreshes} refreshes was missed` };
}

function withDeviation(value, sigma) {
  const digits = sigma > 0 ? Math.min(6, Math.max(1, 1 - Math.floor(Math.log10(sigma)))) : 4;
  return `${value.toFixed(digits)} ± ${Math.max(sigma, 10 ** -digits).toFixed(digits)}`;
}
