//! How long a one-sided CUSUM runs until it signals.
//!
//! Scheme: `S = max(0, S + x - k)`, signal when `S > h`, `S` starts at 0, `x` normal with mean `shift` and unit variance,
//! independent; the run length counts the sample that signals. Its mean solves an integral equation with an atom at zero
//! (Page 1954), here by Gauss-Legendre nodes (Nystrom). The linear system is eliminated without subtractions in the manner
//! of Grassmann, Taksar and Heyman (1985): the diagonal is the sum of the ways out of a state, so that even a run length
//! of 1e15 keeps its digits, where `1 - (probability to stay)` would lose them all.
//!
//! For a far threshold the run length has an exact form: with `D = shift - k`,
//! `L(h) = (exp(-2Dh) - 1 + 2Dh)/(2 D^2) + b (1 - exp(-2Dh))/(2D) + c` up to terms that vanish exponentially in `h`,
//! since the two ends of the walk no longer feel each other. (Siegmund's approximation of 1985 is this form with
//! `b = 2 x 0.583`, `c = 0.583^2` and more.) The two constants come from two solved cases.

use statrs::function::erf::erfc;

/// Up to this threshold the system is solved as it is; beyond, the exact form for far thresholds takes over.
const DIRECT_UP_TO: f64 = 40.0;

/// Above this drift per sample the far form sets in too late, and the system is solved at any threshold.
const FAR_FORM_DRIFT: f64 = 3.0;

/// Average run length of the one-sided scheme of the module's head: reference value `k`, threshold `h >= 0`, both in
/// units of the standard deviation, and true mean `shift`.
///
/// Relative error under 1e-9 (that of the normal tail in use). Infinite where it exceeds the numbers; NaN for a negative
/// threshold or arguments that are no numbers.
pub fn cusum_arl(k: f64, h: f64, shift: f64) -> f64 {
    let drift = shift - k;
    if !(drift.is_finite() && h.is_finite() && h >= 0.0) {
        return f64::NAN;
    }
    if h <= DIRECT_UP_TO || drift > FAR_FORM_DRIFT {
        return solved(drift, h);
    }
    FarForm::through(drift, DIRECT_UP_TO - 8.0, DIRECT_UP_TO).run_length(h)
}

/// Average run length of the two one-sided schemes run side by side, by Kemp (1961): `1/L = 1/L(+) + 1/L(-)`.
pub fn cusum_arl_two_sided(k: f64, h: f64, shift: f64) -> f64 {
    (cusum_arl(k, h, shift).recip() + cusum_arl(k, h, -shift).recip()).recip()
}

/// Mean delay after a shift that comes after a long quiet run: `S` starts from its quasi-stationary distribution under
/// mean zero instead of from 0. The sample that signals is counted. NaN as in [`cusum_arl`].
pub fn steady_state_delay(k: f64, h: f64, shift: f64) -> f64 {
    if !(k.is_finite() && shift.is_finite() && h.is_finite() && h >= 0.0) {
        return f64::NAN;
    }
    let weights = Chain::new(-k, h).quasi_stationary();
    let delays = Chain::new(shift - k, h).run_lengths();
    weights.iter().zip(delays).map(|(weight, delay)| weight * delay).sum()
}

/// The threshold at which the in-control run length (mean zero) of a scheme with reference value `k >= 0` is `arl0`.
///
/// Zero if even a threshold of zero runs as long. Accurate to 1e-9 in the logarithm of the run length, whatever its size.
/// NaN if `k` is negative or either is no finite number.
pub fn threshold_for(k: f64, arl0: f64) -> f64 {
    // At 10 sigma the far form's neglected terms are under exp(-25) of the run length for every drift <= 0.
    const NEAR: f64 = 10.0;
    if !(k.is_finite() && k >= 0.0 && arl0.is_finite()) {
        return f64::NAN;
    }
    if arl0 <= solved(-k, 0.0) {
        return 0.0;
    }
    let wanted = arl0.ln();
    if solved(-k, NEAR) >= arl0 {
        return rising_root(0.0, NEAR, |h| solved(-k, h).ln() - wanted);
    }
    let far = FarForm::through(-k, NEAR, NEAR + 4.0);
    let mut upper = 2.0 * NEAR;
    while far.run_length(upper) < arl0 {
        upper *= 2.0;
    }
    rising_root(NEAR, upper, |h| far.run_length(h).ln() - wanted)
}

/// The zero of a rising function between `low` and `high`, by the secant method kept in its bracket (Illinois).
fn rising_root(mut low: f64, mut high: f64, excess: impl Fn(f64) -> f64) -> f64 {
    const TOLERANCE: f64 = 1e-11;
    let (mut below, mut above) = (excess(low), excess(high));
    let mut last_moved_low = None;
    for _ in 0..100 {
        let h =
            if above.is_finite() { high - above * (high - low) / (above - below) } else { f64::midpoint(low, high) };
        let value = excess(h);
        if value.abs() < TOLERANCE || high - low < TOLERANCE * high {
            return h;
        }
        let moves_low = value < 0.0;
        let again = last_moved_low == Some(moves_low);
        if moves_low {
            (low, below) = (h, value);
            above = if again { above / 2.0 } else { above };
        } else {
            (high, above) = (h, value);
            below = if again { below / 2.0 } else { below };
        }
        last_moved_low = Some(moves_low);
    }
    f64::midpoint(low, high)
}

/// The run length by the full system.
fn solved(drift: f64, h: f64) -> f64 {
    if h == 0.0 {
        return upper_tail(-drift).recip();
    }
    Chain::new(drift, h).run_lengths().first().copied().unwrap_or(f64::NAN)
}

/// The form of the run length at far thresholds, for one drift.
struct FarForm {
    drift: f64,
    slope: f64,
    constant: f64,
}

impl FarForm {
    /// Through the solved run lengths at two thresholds.
    fn through(drift: f64, first: f64, second: f64) -> Self {
        let rest = |h: f64| solved(drift, h) - parabola(drift, h);
        let slope = (rest(second) - rest(first)) / (line(drift, second) - line(drift, first));
        Self { drift, slope, constant: rest(first) - slope * line(drift, first) }
    }

    fn run_length(&self, h: f64) -> f64 {
        parabola(self.drift, h) + self.slope * line(self.drift, h) + self.constant
    }
}

/// `(exp(-2Dh) - 1 + 2Dh)/(2 D^2)`: `h^2` without drift.
fn parabola(drift: f64, h: f64) -> f64 {
    let y = 2.0 * drift * h;
    let share = if y.abs() < 1e-2 {
        0.5 - y * (1.0 / 6.0 - y * (1.0 / 24.0 - y * (1.0 / 120.0 - y * (1.0 / 720.0 - y / 5040.0))))
    } else {
        ((-y).exp_m1() + y) / (y * y)
    };
    2.0 * h * h * share
}

/// `(1 - exp(-2Dh))/(2D)`: `h` without drift.
fn line(drift: f64, h: f64) -> f64 {
    let y = 2.0 * drift * h;
    if y == 0.0 { h } else { -(-y).exp_m1() / y * h }
}

/// The scheme as a chain of states: the atom at zero, then one state per node of `(0, h)`.
struct Chain {
    size: usize,
    /// Probability to go from a state (row) to a state (column) within one sample, row by row.
    go: Vec<f64>,
    /// Probability to signal at the next sample.
    signal: Vec<f64>,
}

impl Chain {
    fn new(drift: f64, h: f64) -> Self {
        // Three nodes a sigma: the Gaussian kernel is then integrated to rounding error (the tests halve and double).
        Self::with_nodes(drift, h, 16 + (3.0 * h).ceil() as usize)
    }

    fn with_nodes(drift: f64, h: f64, nodes: usize) -> Self {
        let rule = gauss_legendre(nodes);
        let place = |node: f64| h / 2.0 * (1.0 + node);
        let states: Vec<f64> = std::iter::once(0.0).chain(rule.iter().map(|(node, _)| place(*node))).collect();
        let mut go = Vec::with_capacity(states.len() * states.len());
        for from in &states {
            go.push(upper_tail(from + drift));
            go.extend(rule.iter().map(|(node, weight)| h / 2.0 * weight * density(place(*node) - from - drift)));
        }
        let signal = states.iter().map(|from| upper_tail(h - from - drift)).collect();
        Self { size: states.len(), go, signal }
    }

    /// Expected samples until the signal from each state. Adds, multiplies and divides positive numbers only.
    fn run_lengths(mut self) -> Vec<f64> {
        let size = self.size;
        let mut spent = vec![1.0; size];
        let mut leave = vec![0.0; size];
        for last in (1..size).rev() {
            let (above, row) = self.go.split_at_mut(last * size);
            let row = &row[..last];
            leave[last] = row.iter().sum::<f64>() + self.signal[last];
            for (from, way) in above.chunks_exact_mut(size).enumerate() {
                let share = way[last] / leave[last];
                way.iter_mut().zip(row).for_each(|(direct, onward)| *direct += share * onward);
                self.signal[from] += share * self.signal[last];
                spent[from] += share * spent[last];
            }
        }
        let mut lengths = vec![spent[0] / self.signal[0]];
        for state in 1..size {
            let row = &self.go[state * size..state * size + state];
            let onward: f64 = row.iter().zip(&lengths).map(|(go, length)| go * length).sum();
            lengths.push((spent[state] + onward) / leave[state]);
        }
        lengths
    }

    /// Where the chain is after a long run without a signal, as a probability of each state: power iteration.
    fn quasi_stationary(&self) -> Vec<f64> {
        let mut here = vec![0.0; self.size];
        here[0] = 1.0;
        for _ in 0..100_000 {
            let mut next = vec![0.0; self.size];
            for (mass, row) in here.iter().zip(self.go.chunks_exact(self.size)) {
                next.iter_mut().zip(row).for_each(|(sum, go)| *sum += mass * go);
            }
            let total: f64 = next.iter().sum();
            for mass in &mut next {
                *mass /= total;
            }
            let change: f64 = next.iter().zip(&here).map(|(new, old)| (new - old).abs()).sum();
            here = next;
            if change < 1e-14 {
                break;
            }
        }
        here
    }
}

fn density(x: f64) -> f64 {
    (-0.5 * x * x).exp() / (2.0 * std::f64::consts::PI).sqrt()
}

/// Probability that a standard normal exceeds `x`, also where it is tiny.
fn upper_tail(x: f64) -> f64 {
    0.5 * erfc(x * std::f64::consts::FRAC_1_SQRT_2)
}

/// Nodes and weights of Gauss and Legendre on (-1, 1), rising: Newton on the polynomial from the usual first guess.
fn gauss_legendre(count: usize) -> Vec<(f64, f64)> {
    let n = count as f64;
    let node = |index: usize| {
        let mut x = -(std::f64::consts::PI * (index as f64 + 0.75) / (n + 0.5)).cos();
        let mut slope = 1.0;
        for _ in 0..20 {
            let (mut value, mut former) = (1.0, 0.0);
            for degree in 0..count {
                let j = degree as f64;
                (value, former) = (((2.0 * j + 1.0) * x * value - j * former) / (j + 1.0), value);
            }
            slope = n * (x * value - former) / (x * x - 1.0);
            let step = value / slope;
            x -= step;
            if step.abs() < 1e-15 {
                break;
            }
        }
        (x, 2.0 / ((1.0 - x * x) * slope * slope))
    };
    (0..count).map(node).collect()
}
