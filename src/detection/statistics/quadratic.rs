//! Sums of gamma variates: the exact distribution of a channel's energy, and of its ratio to a
//! floor.
//!
//! For white noise the energy of a channel, summed over bins and overlapped transforms, is a
//! quadratic form in correlated complex Gaussians: `sum lambda_j E_j` with exponential `E_j`, where
//! the weights `lambda_j` are the eigenvalues of their covariance (see [`super::weights`]). Equal
//! or merged weights make gamma variates, so a [`GammaSum`] is `sum scale_j Gamma(shape_j)`.
//!
//! Tails come from numerical inversion of the moment generating function along a contour through
//! the saddlepoint (Rice, "Distribution of quadratic forms in normal random variables: evaluation
//! by numerical integration", SIAM J. Sci. Stat. Comput. 1, 1980). There the integrand neither
//! oscillates nor cancels, so the *relative* error stays near rounding however far out the tail is;
//! a saddlepoint formula alone would be off by up to a few per cent for a handful of looks, and
//! Imhof's integral along the imaginary axis loses all digits at 1e-9.

use num_complex::Complex64;

use super::gamma::wilson_hilferty;
use super::{normal, solve_upper_tail};

/// The distribution of `sum scale_j Gamma(shape_j)` of independent gamma variates of scale 1.
#[derive(Clone, Debug, PartialEq)]
pub struct GammaSum {
    terms: Vec<Term>,
}

/// One gamma variate: its scale and its shape, both above 0.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Term {
    /// Scale: the mean of one look.
    pub scale: f64,
    /// Shape: how many looks.
    pub shape: f64,
}

impl GammaSum {
    /// A sum of the given terms.
    ///
    /// # Panics
    /// If there is none, or a scale or shape is not positive.
    pub fn new(terms: Vec<Term>) -> GammaSum {
        assert!(!terms.is_empty(), "a sum of nothing");
        assert!(terms.iter().all(|t| t.scale > 0.0 && t.shape > 0.0), "terms {terms:?}");
        GammaSum { terms }
    }

    /// The mean of `looks` independent looks, of mean 1.
    pub fn of_looks(looks: f64) -> GammaSum {
        GammaSum::new(vec![Term { scale: 1.0 / looks, shape: looks }])
    }

    /// The terms.
    pub fn terms(&self) -> &[Term] {
        &self.terms
    }

    /// Mean.
    pub fn mean(&self) -> f64 {
        self.terms.iter().map(|t| t.scale * t.shape).sum()
    }

    /// Variance.
    pub fn variance(&self) -> f64 {
        self.terms.iter().map(|t| t.scale * t.scale * t.shape).sum()
    }

    /// Equivalent looks: the squared mean over the variance.
    pub fn looks(&self) -> f64 {
        self.mean() * self.mean() / self.variance()
    }

    /// The same sum, each value multiplied by `factor` (above 0).
    pub fn scaled(&self, factor: f64) -> GammaSum {
        let scaled = |t: &Term| Term { scale: t.scale * factor, shape: t.shape };
        GammaSum::new(self.terms.iter().map(scaled).collect())
    }

    fn scale_max(&self) -> f64 {
        self.terms.iter().map(|t| t.scale).fold(0.0, f64::max)
    }

    /// Logarithm of the moment generating function at `s`.
    fn cumulant(&self, s: Complex64) -> Complex64 {
        let term = |t: &Term| -(Complex64::new(1.0, 0.0) - s * t.scale).ln() * t.shape;
        self.terms.iter().map(term).sum()
    }

    /// First and second derivative of the cumulant generating function at a real `s`.
    fn slopes(&self, s: f64) -> (f64, f64) {
        self.terms.iter().fold((0.0, 0.0), |(first, second), t| {
            let reach = t.scale / (1.0 - t.scale * s);
            (first + t.shape * reach, second + t.shape * reach * reach)
        })
    }

    /// Probability that the sum exceeds `x`.
    ///
    /// # Panics
    /// If `x` is negative.
    pub fn upper_tail(&self, x: f64) -> f64 {
        assert!(x >= 0.0, "tail at {x}");
        if x == 0.0 {
            return 1.0;
        }
        Inversion::new(self, None, x).upper_tail()
    }

    /// The value that the sum exceeds with the given probability.
    ///
    /// # Panics
    /// If `probability` is not between 0 and 1 (both excluded).
    pub fn upper_quantile(&self, probability: f64) -> f64 {
        let deviate = normal::upper_quantile(probability);
        let start = self.mean() * wilson_hilferty(self.looks(), deviate).max(1e-3);
        solve_upper_tail(probability, start, |x| {
            let inversion = Inversion::new(self, None, x);
            (inversion.upper_tail(), inversion.density())
        })
    }

    /// Probability that this sum exceeds `ratio` times an independent other one.
    ///
    /// # Panics
    /// If the ratio is not positive.
    pub fn ratio_upper_tail(&self, other: &GammaSum, ratio: f64) -> f64 {
        assert!(ratio > 0.0, "ratio {ratio}");
        Inversion::new(self, Some(&other.scaled(ratio)), 0.0).upper_tail()
    }

    /// The ratio to an independent other sum that is exceeded with the given probability. `start`
    /// is a guess; one within a few per cent saves half the work.
    ///
    /// # Panics
    /// If `probability` is not between 0 and 1 (both excluded).
    pub fn ratio_upper_quantile(&self, other: &GammaSum, probability: f64, start: f64) -> f64 {
        solve_upper_tail(probability, start, |ratio| {
            let below = other.scaled(ratio);
            let inversion = Inversion::new(self, Some(&below), 0.0);
            // d/dratio of the cumulant of `-ratio other` at `s` is `-s` times the other's own
            // slope.
            let slope = |s: Complex64| {
                let term =
                    |t: &Term| (Complex64::ONE + s * t.scale).inv() * (t.scale * t.shape / ratio);
                below.terms.iter().map(term).sum::<Complex64>()
            };
            (inversion.upper_tail(), inversion.contour(slope))
        })
    }

    /// A guess at [`GammaSum::ratio_upper_quantile`] from the two variances, good to some per cent
    /// unless looks are few.
    pub fn ratio_guess(&self, other: &GammaSum, probability: f64) -> f64 {
        let looks = 1.0 / (1.0 / self.looks() + 1.0 / other.looks());
        let deviate = normal::upper_quantile(probability);
        self.mean() / other.mean() * wilson_hilferty(looks, deviate).max(1e-3)
    }
}

/// Inversion of the moment generating function of `above - below` at `x`.
struct Inversion<'a> {
    above: &'a GammaSum,
    below: Option<&'a GammaSum>,
    x: f64,
    /// Where the contour crosses the real axis; its sign tells which tail it yields.
    crossing: f64,
    /// Standard deviation of the tilted distribution there.
    spread: f64,
}

impl<'a> Inversion<'a> {
    fn new(above: &'a GammaSum, below: Option<&'a GammaSum>, x: f64) -> Inversion<'a> {
        let mut inversion = Inversion { above, below, x, crossing: 0.0, spread: 0.0 };
        inversion.crossing = inversion.saddlepoint();
        inversion.spread = inversion.slopes(inversion.crossing).1.sqrt();
        // At the mean the saddlepoint meets the pole at 0. Any crossing will do: half a tilted
        // standard deviation off keeps the integrand smooth on the scale that it is sampled at.
        let least = 0.5 / inversion.spread;
        if inversion.crossing.abs() < least {
            let (low, high) = inversion.domain();
            inversion.crossing = if inversion.crossing < 0.0 {
                -least.min(-0.5 * low)
            } else {
                least.min(0.5 * high)
            };
            inversion.spread = inversion.slopes(inversion.crossing).1.sqrt();
        }
        inversion
    }

    /// Open interval of real `s` for which the generating function exists.
    fn domain(&self) -> (f64, f64) {
        let low = self.below.map_or(f64::NEG_INFINITY, |below| -1.0 / below.scale_max());
        (low, 1.0 / self.above.scale_max())
    }

    fn slopes(&self, s: f64) -> (f64, f64) {
        let (mut first, mut second) = self.above.slopes(s);
        if let Some(below) = self.below {
            let (other_first, other_second) = below.slopes(-s);
            first -= other_first;
            second += other_second;
        }
        (first, second)
    }

    /// Solves `K'(s) = x` in the domain, by Newton steps inside a bracket; `K'` rises from end to
    /// end.
    fn saddlepoint(&self) -> f64 {
        let (mut low, mut high) = self.domain();
        let unit = high;
        let mut s = 0.0;
        for _ in 0..200 {
            let (first, second) = self.slopes(s);
            if first < self.x {
                low = s;
            } else {
                high = s;
            }
            let mut next = s + (self.x - first) / second;
            if !(low..=high).contains(&next) {
                next = if low.is_finite() { 0.5 * (low + high) } else { 2.0 * s.min(-unit) };
            }
            if (next - s).abs() <= 1e-9 * (s.abs() + 1e-3 * unit) {
                return next;
            }
            s = next;
        }
        s
    }

    /// `K(s) - s x`.
    fn exponent(&self, s: Complex64) -> Complex64 {
        let below = self.below.map_or(Complex64::ZERO, |below| below.cumulant(-s));
        self.above.cumulant(s) + below - s * self.x
    }

    /// `1/(2 pi i)` times the integral of `exp(K(s) - s x) f(s)` over the contour: half of it by
    /// the trapezoidal rule, which converges exponentially for an analytic integrand that dies out;
    /// the other half is its mirror image.
    ///
    /// The contour is `s = c + i y + b y^2`. It bends to the right, around the singularities of
    /// `above` (all on the real axis beyond `c`), where `exp(-s x)` dies out fast however few looks
    /// there are. With `y = sinh(u)/spread` it also dies out fast for a ratio, where `x` is 0.
    fn contour(&self, weight: impl Fn(Complex64) -> Complex64) -> f64 {
        const STEP: f64 = 0.08;
        let peak = self.exponent(Complex64::from(self.crossing)).re;
        let unit = 1.0 / self.spread;
        let bend = 0.25 / (self.domain().1 - self.crossing);
        let mut sum = 0.0;
        for k in 0..2000 {
            let u = STEP * k as f64;
            let y = unit * u.sinh();
            let s = Complex64::new(self.crossing + bend * y * y, y);
            let slope = Complex64::new(2.0 * bend * y, 1.0) * (unit * u.cosh());
            let value = (self.exponent(s) - peak).exp() * weight(s) * slope;
            let term = value.im * if k == 0 { 0.5 } else { 1.0 };
            sum += term;
            if k > 10 && value.norm() < 1e-15 * sum.abs() {
                break;
            }
        }
        peak.exp() * sum * STEP / std::f64::consts::PI
    }

    fn upper_tail(&self) -> f64 {
        let tail = self.contour(|s| 1.0 / s);
        if self.crossing > 0.0 { tail } else { 1.0 + tail }
    }

    fn density(&self) -> f64 {
        self.contour(|_| Complex64::ONE)
    }
}
