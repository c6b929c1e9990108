//! The rule `held`: torques held over the tick, every soft sole's motion solved exactly, all soles together.
//!
//! M, h, the Jacobians, S and D are frozen. Stacked over the soft soles, let x(t) be how far each sole has come away from its drift
//! (the motion it would have with zero acceleration), x'' its acceleration, and w(t) its wrench:
//! ```text
//! x'' = W w(t) + b,     w(t) = w0 + (w_D - w0) t/T - S x - D x',     x(0) = x'(0) = 0.
//! ```
//! `W = J M^-1 J'` (with rigid soles: J N J', N the inverse of M under their constraint) couples the soles; b holds torques, loads,
//! bias and J_dot nu and does not change during the tick. w0 is the present wrench, w_D the law at the end of the drift (with a
//! measured wrench: that wrench plus the change of the law).
//!
//! With p = x''(0) = W w0 + b, Delta = w_D - w0 and the responses to a unit step of p at the tick's end, V (velocity), X = int V,
//! Y = int X, Y2 = int Y, linearity gives
//! ```text
//! w_plus = w0 + E Delta - P p,    P = S X + D V,                E = I - Q W,
//! w_bar  = w0 + F Delta - Q p,    Q = (S Y + D X)/T,            F = I/2 - (S Y2 + D Y) W / T^2,
//! ```
//! w_bar the average over the tick. The unknown of the problem is the AVERAGE acceleration a = x'(T)/T (so that velocities
//! after the tick are `nu + T nu_dot`), and averaging the equation of motion gives a = W w_bar + b. Hence `p = a - W (w_bar - w0)`, exactly,
//! and without dividing by anything:
//! ```text
//! (Z + Q)^-1 [ Q a + E (w_bar - w0) - F Delta ]                 = 0        (mean rows)
//! (Z + P)^-1 [ P a - P W (w_bar - w0) + (w_plus - w0) - E Delta ] = 0        (end rows)
//! ```
//! with `M nu_dot + h = S' tau + sum J' w_bar`. w_bar could be eliminated from the first only where E has an inverse:
//! an undamped sole of frequency omega has E = sin(omega T)/(omega T), zero at omega T = pi, where no torque changes the average
//! acceleration. So w_bar is an unknown of its own. On soft ground E = I and P, Q are small: the rows prescribe wrenches. On ever
//! stiffer ground E goes to zero and Q to W^-1: they prescribe the acceleration, as rigid ground does. Without
//! stiffness and damping P = Q = 0 and the wrench stays what it is. `(Z + Q)^-1` matters for wrenches that move nothing (W u = 0,
//! two soles pushing against each other through one body), for which P and Q grow with the stiffness.
//!
//! The step responses are phi functions of the matrix exponential, `int_0^1 s^(k-1)/(k-1)! e^(z(1-s)) ds`: a Taylor
//! series at `z / 2^n` and the doubling rule `2^k phi_k(2z) = e^z phi_k(z) + sum_(j=1..k) phi_j(z)/(k-j)!`
//! (Skaflestad and Wright 2009, quoted from memory). Time is measured in ticks, lengths in the sole's radius of gyration, mass in the robot's.

use nalgebra::{DMatrix, DVector};

use super::{ContactError, TickMap};

/// Terms of the Taylor series; at a norm of one half the first one left out is below 1e-22.
const TAYLOR_TERMS: usize = 18;
/// Norm up to which the series is used.
const TAYLOR_NORM: f64 = 0.5;
/// Most doublings: a bed that rings 1e12 times in a tick is refused.
const MOST_DOUBLINGS: usize = 60;

/// What the rule needs of one soft sole.
#[derive(Debug, Clone, Copy)]
pub struct HeldSole<'a> {
    /// Present and drift wrench, stiffness, damping, dimension.
    pub map: &'a TickMap,
    /// Radius of gyration of the sole (m), by which moments are scaled; 1 under a point.
    pub radius: f64,
}

/// The coupled equality of all soft soles. n is the sum of their dimensions; vectors are stacked in the order given, forces before moments.
/// In physical units, with row i an acceleration (m/s^2, rad/s^2):
/// ```text
/// mean_acceleration a + mean_mean w_bar                 = mean_right
/// end_acceleration a  + end_mean w_bar + end_end w_plus = end_right
/// ```
#[derive(Debug, Clone, PartialEq)]
pub struct CoupledMap {
    /// n x n, on the average acceleration of the soles (classical, of their origins).
    pub mean_acceleration: DMatrix<f64>,
    /// n x n, on the average wrench.
    pub mean_mean: DMatrix<f64>,
    /// n.
    pub mean_right: DVector<f64>,
    /// n x n, on the average acceleration.
    pub end_acceleration: DMatrix<f64>,
    /// n x n, on the average wrench.
    pub end_mean: DMatrix<f64>,
    /// n x n, on the wrench at the tick's end.
    pub end_end: DMatrix<f64>,
    /// n.
    pub end_right: DVector<f64>,
}

/// The coupled equality of `soles` (soft ones) whose accelerations answer their wrenches through `mobility` (W: n x n, symmetric;
/// m/s^2 per N and so on), over a tick of length `tick` (s). `mass` (kg) is the mass that Z weighs wrenches against (the robot's).
///
/// # Errors
/// `NotPositive`; `Degenerate` where numbers overflow or a scaled row block has no inverse.
pub fn coupled_map(soles: &[HeldSole], mobility: &DMatrix<f64>, tick: f64, mass: f64) -> Result<CoupledMap, ContactError> {
    super::tick::require_positive("the tick", tick)?;
    super::tick::require_positive("the mass", mass)?;
    let units = Units::of(soles, tick, mass);
    let n = units.lengths.len();
    let degenerate = || ContactError::Degenerate { largest_gain: mobility.amax(), largest_drift: units.change.amax() };
    let w = units.mobility(mobility);
    let finite = [&w, &units.stiffness, &units.damping].iter().all(|m| m.iter().all(|v| v.is_finite()));
    if !finite || !units.change.iter().all(|v| v.is_finite()) {
        return Err(degenerate());
    }
    let step = StepResponse::new(&(&w * &units.stiffness), &(&w * &units.damping)).ok_or_else(degenerate)?;
    let (s, d) = (&units.stiffness, &units.damping);
    let end = s * &step.position + d * &step.velocity;
    let mean = s * &step.integral + d * &step.position;
    let identity = DMatrix::identity(n, n);
    let kept = &identity - &mean * &w;
    let half = &identity * 0.5 - (s * &step.double_integral + d * &step.integral) * &w;
    let inverse = |m: &DMatrix<f64>| (&identity + m).full_piv_lu().try_inverse().ok_or_else(degenerate);
    let (mean_scale, end_scale) = (inverse(&mean)?, inverse(&end)?);

    // Scaled rows on scaled unknowns: acceleration N a, wrenches N^-1 w / m.
    let mean_mean = &mean_scale * &kept;
    let end_mean = -(&end_scale * &end * &w);
    let mean_right = &mean_mean * &units.now + &mean_scale * (half * &units.change);
    let end_right = &end_mean * &units.now + &end_scale * (&units.now + &kept * &units.change);
    let map = CoupledMap {
        mean_acceleration: units.on_acceleration(&mean_scale * &mean),
        mean_mean: units.on_wrench(mean_mean),
        mean_right: units.side(mean_right),
        end_acceleration: units.on_acceleration(&end_scale * &end),
        end_mean: units.on_wrench(end_mean),
        end_end: units.on_wrench(end_scale),
        end_right: units.side(end_right),
    };
    if map.is_finite() { Ok(map) } else { Err(degenerate()) }
}

impl CoupledMap {
    fn is_finite(&self) -> bool {
        let matrices = [&self.mean_acceleration, &self.mean_mean, &self.end_acceleration, &self.end_mean, &self.end_end];
        matrices.iter().all(|m| m.iter().all(|v| v.is_finite()))
            && self.mean_right.iter().chain(self.end_right.iter()).all(|v| v.is_finite())
    }
}

/// Everything free of units: with N = diag(1, 1, 1, r, r, r) per sole, accelerations become `N a`, wrenches `N^-1 w / m`, W becomes
/// `m N W N`, S becomes `T^2 N^-1 S N^-1 / m`, D becomes `T N^-1 D N^-1 / m`.
struct Units {
    lengths: Vec<f64>,
    mass: f64,
    stiffness: DMatrix<f64>,
    damping: DMatrix<f64>,
    now: DVector<f64>,
    /// `w_D - w0`.
    change: DVector<f64>,
}

impl Units {
    fn of(soles: &[HeldSole], tick: f64, mass: f64) -> Units {
        let n = soles.iter().map(|s| s.map.dimension).sum();
        let mut units = Units {
            lengths: Vec::with_capacity(n),
            mass,
            stiffness: DMatrix::zeros(n, n),
            damping: DMatrix::zeros(n, n),
            now: DVector::zeros(n),
            change: DVector::zeros(n),
        };
        for sole in soles {
            let (start, map) = (units.lengths.len(), sole.map);
            let now = map.now.to_vec6();
            let length = |i: usize| if i < 3 { 1.0 } else { sole.radius };
            for i in 0..map.dimension {
                for j in 0..map.dimension {
                    let unit = mass * length(i) * length(j);
                    units.stiffness[(start + i, start + j)] = tick * tick * map.stiffness[(i, j)] / unit;
                    units.damping[(start + i, start + j)] = tick * map.damping[(i, j)] / unit;
                }
                units.now[start + i] = now[i] / (mass * length(i));
                units.change[start + i] = (map.drift[i] - now[i]) / (mass * length(i));
            }
            units.lengths.extend((0..map.dimension).map(length));
        }
        units
    }

    fn mobility(&self, mobility: &DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(l.len(), l.len(), |i, j| self.mass * l[i] * l[j] * mobility[(i, j)])
    }

    /// Scaled rows on `N a` as rows in m/s^2 and rad/s^2 on a.
    fn on_acceleration(&self, rows: DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(l.len(), l.len(), |i, j| rows[(i, j)] * l[j] / l[i])
    }

    /// Scaled rows on `N^-1 w / m` as rows in m/s^2 and rad/s^2 on w.
    fn on_wrench(&self, rows: DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(l.len(), l.len(), |i, j| rows[(i, j)] / (self.mass * l[j] * l[i]))
    }

    fn side(&self, right: DVector<f64>) -> DVector<f64> {
        DVector::from_fn(right.len(), |i, _| right[i] / self.lengths[i])
    }
}

/// Response of `x'' = p - K x - C x'` from rest to a unit step of each component of p, after unit time (n x n each).
struct StepResponse {
    /// x'.
    velocity: DMatrix<f64>,
    /// x.
    position: DMatrix<f64>,
    /// `int x`.
    integral: DMatrix<f64>,
    /// `int int x`.
    double_integral: DMatrix<f64>,
}

impl StepResponse {
    /// None where the norm is beyond all doublings.
    fn new(k: &DMatrix<f64>, c: &DMatrix<f64>) -> Option<StepResponse> {
        let n = k.nrows();
        let mut z = DMatrix::zeros(2 * n, 2 * n);
        for i in 0..n {
            z[(i, n + i)] = 1.0;
        }
        z.view_mut((n, 0), (n, n)).copy_from(&-k);
        z.view_mut((n, n), (n, n)).copy_from(&-c);
        let norm = z.column_iter().map(|column| column.iter().map(|v| v.abs()).sum()).fold(0.0, f64::max);
        let mut doublings = 0;
        let mut shrink = 1.0;
        while norm * shrink > TAYLOR_NORM {
            if doublings == MOST_DOUBLINGS {
                return None;
            }
            doublings += 1;
            shrink *= 0.5;
        }
        let mut phi = Phi::series(&(z * shrink), n);
        for _ in 0..doublings {
            phi = phi.doubled();
        }
        let block = |m: &DMatrix<f64>, row: usize| m.view((row, 0), (n, n)).into_owned();
        Some(StepResponse {
            velocity: block(&phi.first, n),
            position: block(&phi.first, 0),
            integral: block(&phi.second, 0),
            double_integral: block(&phi.third, 0),
        })
    }
}

/// `e^z`, and `phi_1 B`, `phi_2 B`, `phi_3 B` with B the last n columns of the identity.
struct Phi {
    exponential: DMatrix<f64>,
    first: DMatrix<f64>,
    second: DMatrix<f64>,
    third: DMatrix<f64>,
}

impl Phi {
    /// `phi_3 = sum z^i / (i+3)!` by Horner's rule, then `phi_(k-1) = z phi_k + 1/(k-1)!`.
    fn series(z: &DMatrix<f64>, n: usize) -> Phi {
        let size = z.nrows();
        let identity = DMatrix::<f64>::identity(size, size);
        let mut third = &identity / 6.0;
        // Horner from the last term, each bracket divided by the factorial's next factor.
        let mut bracket = identity.clone();
        for i in (1..=TAYLOR_TERMS).rev() {
            bracket = &identity + (z * &bracket) / (i + 3) as f64;
        }
        third = third * bracket;
        let second = z * &third + &identity * 0.5;
        let first = z * &second + &identity;
        let exponential = z * &first + &identity;
        let last = |m: DMatrix<f64>| m.columns(size - n, n).into_owned();
        Phi { exponential, first: last(first), second: last(second), third: last(third) }
    }

    /// The same at twice the argument.
    fn doubled(self) -> Phi {
        let Phi { exponential: e, first, second, third } = self;
        Phi {
            first: (&e * &first + &first) * 0.5,
            second: (&e * &second + &second + &first) * 0.25,
            third: (&e * &third + &third + &second + &first * 0.5) * 0.125,
            exponential: &e * &e,
        }
    }
}
