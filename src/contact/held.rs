//! The rule `held`: torques held over the tick, every soft sole's motion solved exactly, all soles together.
//!
//! M, h, the Jacobians, S and D are frozen; what moves is every soft sole on its bed and, where a joint has viscous friction, the
//! friction with its speed. Both are coordinates here: a sole with its six (or three) parts, a damped joint with one. Stacked over them, let
//! x(t) be how far each has come away from its drift (the motion it would have with zero acceleration), x'' its acceleration, and w(t) the
//! wrench (or friction force) on it:
//! ```text
//! x'' = W w(t) + b,     w(t) = w0 + Delta t/T - S x - D x',     x(0) = x'(0) = 0,     Delta = w_D - w0.
//! ```
//! `W = J M^-1 J'` (with rigid soles: J N J', N the inverse of M under their constraint) couples the coordinates; b holds torques, loads,
//! bias and J_dot nu and does not change during the tick. w0 is the present wrench, w_D the law at the end of the drift (with a
//! measured wrench: that wrench plus the change of the law). For joint friction w is the change from the present, so w0 = Delta = 0,
//! S = 0, and D is the viscous coefficient: a foot of 1e-3 kg m^2 on 0.2 N m s slows within 5 ms, and left out this was nine tenths of the error.
//!
//! With p = x''(0) = W w0 + b and the responses to a unit step of p at the tick's end, V (velocity), X = int V, Y = int X, Y2 = int Y,
//! linearity gives
//! ```text
//! w_plus = w0 + E Delta - P p,    P = S X + D V,                E = I - Q W,
//! w_bar  = w0 + F Delta - Q p,    Q = (S Y + D X)/T,            F = I/2 - (S Y2 + D Y) W / T^2,
//! ```
//! w_bar the average over the tick. The unknown of the problem is the AVERAGE acceleration a = x'(T)/T (so that velocities
//! after the tick are `nu + T nu_dot`), and averaging the equation of motion gives a = W w_bar + b. Hence `p = a - W (w_bar - w0)`, exactly,
//! and without dividing by anything:
//! ```text
//! Q a + E (w_bar - w0)                           = F Delta         (mean rows)
//! P a - P W (w_bar - w0) + (w_plus - w0)         = E Delta         (end rows)
//! ```
//! with `M nu_dot + h = S' tau + sum J' w_bar` over all coordinates. The mean rows of the friction coordinates are solved for their w_bar, which
//! then stands nowhere else; E of damping alone is positive definite, `(1 - e^-y)/y` for a joint of its own. On soft ground E = I and P, Q are
//! small: the rows prescribe wrenches. On ever stiffer ground E goes to zero and Q to W^-1: they prescribe the acceleration, as rigid ground
//! does. Without stiffness and damping P = Q = 0 and the wrench stays what it is. The rows of soles are multiplied by `(Z + Q)^-1` and
//! `(Z + P)^-1`, Z = m N^-2 (N below), which matters for wrenches that move nothing (W u = 0, two soles pushing against each other through one
//! body): P and Q grow with the stiffness there.
//!
//! Neither kind of row alone can be solved for the soles' w_bar: an undamped sole of frequency omega has `E = sin(omega T)/(omega T)`, zero at
//! omega T = pi, where no torque changes the average acceleration, and `P W = 1 - cos(omega T)`, small on soft ground. Both together can:
//! the 2n rows are `B w_bar + (terms in a and w_plus) = right`, B has full rank, and with `B = Q1 R` the rows Q1' give w_bar and
//! the rows Q2' (the complement) are n contact equalities in a and w_plus. Only where an undamped sole swings a whole number of times
//! within the tick is B singular; that is refused.
//!
//! The step responses are phi functions of the matrix exponential, `phi_k(z) = int_0^1 e^(z (1-s)) s^(k-1)/(k-1)! ds`: a Taylor
//! series at `z / 2^n` and the doubling rule `2^k phi_k(2z) = e^z phi_k(z) + sum_(j=1..k) phi_j(z)/(k-j)!`
//! (Skaflestad and Wright 2009, quoted from memory). Time is measured in ticks, lengths in the sole's radius of gyration, mass in the robot's.

use nalgebra::{DMatrix, DVector};

use super::{ContactError, TickMap};

/// Terms of the Taylor series; at a norm of one half the first one left out is below 1e-22.
const TAYLOR_TERMS: usize = 16;
/// Norm up to which the series is used.
const TAYLOR_NORM: f64 = 0.5;
/// Pivots of B below this share of the largest count as zero.
const SMALLEST_PIVOT: f64 = 1e-10;
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

/// A damped coordinate of its own, such as a joint with viscous friction.
#[derive(Debug, Clone, Copy)]
pub struct Damper {
    /// Force per speed (N s/m, N m s/rad), positive.
    pub damping: f64,
    /// Its inertia with everything else free (kg, kg m^2), for scaling only; positive.
    pub inertia: f64,
}

/// The coupled equality. n is the sum of the soles' dimensions, f the number of dampers; accelerations a are those of all n + f
/// coordinates (soles in the order given, linear before angular, then dampers), wrenches those of the n sole coordinates. Physical units:
/// ```text
/// contact_acceleration a + contact_wrench w_plus = contact_right                      (accelerations)
/// w_bar  = mean_start + mean_acceleration a + mean_wrench w_plus                      (N, N m)
/// change = damper_start + damper_acceleration a + damper_wrench w_plus                (N, N m)
/// ```
/// `change` is by how much the damper's average force differs from the one at the start of the tick. A row of the contact equality belongs
/// to all soles together.
#[derive(Debug, Clone, PartialEq)]
pub struct CoupledMap {
    /// n x (n + f), on the average accelerations (of soles: classical, of their origins).
    pub contact_acceleration: DMatrix<f64>,
    /// n x n, on the wrenches at the tick's end.
    pub contact_wrench: DMatrix<f64>,
    /// n.
    pub contact_right: DVector<f64>,
    /// n.
    pub mean_start: DVector<f64>,
    /// n x (n + f).
    pub mean_acceleration: DMatrix<f64>,
    /// n x n.
    pub mean_wrench: DMatrix<f64>,
    /// f.
    pub damper_start: DVector<f64>,
    /// f x (n + f).
    pub damper_acceleration: DMatrix<f64>,
    /// f x n.
    pub damper_wrench: DMatrix<f64>,
}

/// The coupled equality of `soles` (soft ones) and `dampers` whose accelerations answer their wrenches through `mobility` (W, symmetric;
/// m/s^2 per N and so on), over a tick of length `tick` (s). `mass` (kg) is the mass that Z weighs wrenches against (the robot's).
///
/// # Errors
/// `NotPositive`; `Degenerate` where numbers overflow, a block of rows has no inverse, or an undamped sole swings a whole number of
/// times within the tick.
pub fn coupled_map(
    soles: &[HeldSole],
    dampers: &[Damper],
    mobility: &DMatrix<f64>,
    tick: f64,
    mass: f64,
) -> Result<CoupledMap, ContactError> {
    super::tick::require_positive("the tick", tick)?;
    super::tick::require_positive("the mass", mass)?;
    let units = Units::of(soles, dampers, tick, mass);
    let degenerate = || ContactError::Degenerate { largest_gain: mobility.amax(), largest_drift: units.change.amax() };
    let w = units.mobility(mobility);
    let finite = [&w, &units.stiffness, &units.damping].iter().all(|m| m.iter().all(|v| v.is_finite()));
    if !finite || !units.change.iter().all(|v| v.is_finite()) {
        return Err(degenerate());
    }
    let (n, size) = (units.soles, units.lengths.len());
    let (s, d) = (&units.stiffness, &units.damping);
    let step = StepResponse::new(&(w.columns(0, n) * s), &(&w * d)).ok_or_else(degenerate)?;
    // S acts on the coordinates of soles alone.
    let push = |moved: &DMatrix<f64>, faster: &DMatrix<f64>| {
        let mut out = d * faster;
        let mut rows = out.rows_mut(0, n);
        rows += s * moved.rows(0, n);
        out
    };
    let end = push(&step.position, &step.velocity);
    let mean = push(&step.integral, &step.position);
    let twice = push(&step.double_integral, &step.integral);
    let identity = DMatrix::identity(size, size);
    let terms = Terms {
        kept: &identity - &mean * &w,
        half: identity * 0.5 - twice * &w,
        answered: &end * &w,
        end,
        mean,
    };
    let map = terms.rows(&units).ok_or_else(degenerate)?;
    if map.is_finite() { Ok(map) } else { Err(degenerate()) }
}

/// P, Q, E, F and P W of the comment above, free of units.
struct Terms {
    end: DMatrix<f64>,
    mean: DMatrix<f64>,
    kept: DMatrix<f64>,
    half: DMatrix<f64>,
    answered: DMatrix<f64>,
}

impl Terms {
    /// Damper forces eliminated, rows scaled, units put back. None where a block has no inverse.
    fn rows(&self, units: &Units) -> Option<CoupledMap> {
        let n = units.soles;
        let f = units.lengths.len() - n;
        let block = |m: &DMatrix<f64>, rows: (usize, usize), columns: (usize, usize)| m.view((rows.0, columns.0), (rows.1, columns.1)).into_owned();
        let (sole, damper, all) = ((0, n), (n, f), (0, n + f));
        let free = inverse(block(&self.kept, damper, damper))?;
        let (half, kept) = (&self.half * &units.change, &self.kept * &units.change);
        let part = |v: &DVector<f64>, rows: (usize, usize)| v.rows(rows.0, rows.1).into_owned();

        let damper_acceleration = -(&free * block(&self.mean, damper, all));
        let damper_mean = -(&free * block(&self.kept, damper, sole));
        let damper_start = &free * part(&half, damper);
        let back = block(&self.kept, sole, damper);
        let mean_acceleration = block(&self.mean, sole, all) + &back * &damper_acceleration;
        let mean_mean = block(&self.kept, sole, sole) + &back * &damper_mean;
        let mean_start = part(&half, sole) - &back * &damper_start;
        let answered = block(&self.answered, sole, damper);
        let end_acceleration = block(&self.end, sole, all) - &answered * &damper_acceleration;
        let end_mean = -block(&self.answered, sole, sole) - &answered * &damper_mean;
        let end_start = part(&kept, sole) + &answered * &damper_start;

        let identity = DMatrix::identity(n, n);
        let mean_scale = inverse(&identity + mean_acceleration.columns(0, n))?;
        let end_scale = inverse(&identity + end_acceleration.columns(0, n))?;
        let now = part(&units.now, sole);
        let (mean_mean, end_mean) = (&mean_scale * mean_mean, &end_scale * end_mean);
        let mean_right = &mean_mean * &now + &mean_scale * mean_start;
        let end_right = &end_mean * &now + &end_scale * (&now + end_start);

        // Both kinds of rows, one under the other: on w_bar, and on (a, w_plus, 1).
        let mut on_mean = DMatrix::zeros(2 * n, n);
        on_mean.rows_mut(0, n).copy_from(&mean_mean);
        on_mean.rows_mut(n, n).copy_from(&end_mean);
        let mut others = DMatrix::zeros(2 * n, n + f + n + 1);
        others.view_mut((0, 0), (n, n + f)).copy_from(&(&mean_scale * mean_acceleration));
        others.view_mut((n, 0), (n, n + f)).copy_from(&(&end_scale * end_acceleration));
        others.view_mut((n, n + f), (n, n)).copy_from(&end_scale);
        others.view_mut((0, 2 * n + f), (n, 1)).copy_from(&mean_right);
        others.view_mut((n, 2 * n + f), (n, 1)).copy_from(&end_right);
        let mut mean = DMatrix::zeros(0, 2 * n + f + 1);
        if n > 0 {
            let factors = on_mean.qr();
            let triangle = factors.r();
            let pivots = triangle.diagonal().abs();
            let sound = pivots.iter().all(|&pivot| pivot > SMALLEST_PIVOT * pivots.max());
            if !sound {
                return None;
            }
            factors.q_tr_mul(&mut others);
            mean = triangle.solve_upper_triangular(&others.rows(0, n))?;
        }
        let contact = block(&others, (n.min(others.nrows()), n), (0, 2 * n + f + 1));
        let (mean_acceleration, mean_wrench) = (-mean.columns(0, n + f), -mean.columns(n + f, n));
        let mean_start = mean.column(2 * n + f).into_owned();
        Some(CoupledMap {
            contact_acceleration: units.on_acceleration(contact.columns(0, n + f).into_owned()),
            contact_wrench: units.on_wrench(contact.columns(n + f, n).into_owned()),
            contact_right: units.side(contact.column(2 * n + f).into_owned()),
            damper_acceleration: units.force_on_acceleration(n, damper_acceleration + &damper_mean * &mean_acceleration),
            damper_wrench: units.force_on_wrench(n, &damper_mean * &mean_wrench),
            damper_start: units.force(n, damper_start + &damper_mean * (&mean_start - &now)),
            mean_acceleration: units.force_on_acceleration(0, mean_acceleration),
            mean_wrench: units.force_on_wrench(0, mean_wrench),
            mean_start: units.force(0, mean_start),
        })
    }
}

fn inverse(matrix: DMatrix<f64>) -> Option<DMatrix<f64>> {
    if matrix.is_empty() { Some(matrix) } else { matrix.full_piv_lu().try_inverse() }
}

impl CoupledMap {
    fn is_finite(&self) -> bool {
        let matrices = [
            &self.contact_acceleration,
            &self.contact_wrench,
            &self.mean_acceleration,
            &self.mean_wrench,
            &self.damper_acceleration,
            &self.damper_wrench,
        ];
        let sides = [&self.contact_right, &self.mean_start, &self.damper_start];
        matrices.iter().all(|m| m.iter().all(|v| v.is_finite())) && sides.iter().all(|v| v.iter().all(|x| x.is_finite()))
    }
}

/// Everything free of units: with N = diag(1, 1, 1, r, r, r) per sole and sqrt(inertia / m) per damper, accelerations become `N a`,
/// wrenches `N^-1 w / m`, W becomes `m N W N`, S becomes `T^2 N^-1 S N^-1 / m`, D becomes `T N^-1 D N^-1 / m`.
struct Units {
    /// Diagonal of N.
    lengths: Vec<f64>,
    /// How many coordinates belong to soles; they come first.
    soles: usize,
    mass: f64,
    /// Of the soles' coordinates.
    stiffness: DMatrix<f64>,
    /// Of all coordinates.
    damping: DMatrix<f64>,
    now: DVector<f64>,
    /// `w_D - w0`.
    change: DVector<f64>,
}

impl Units {
    fn of(soles: &[HeldSole], dampers: &[Damper], tick: f64, mass: f64) -> Units {
        let n = soles.iter().map(|s| s.map.dimension).sum();
        let size = n + dampers.len();
        let mut units = Units {
            lengths: Vec::with_capacity(size),
            soles: n,
            mass,
            stiffness: DMatrix::zeros(n, n),
            damping: DMatrix::zeros(size, size),
            now: DVector::zeros(size),
            change: DVector::zeros(size),
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
        for (i, damper) in dampers.iter().enumerate() {
            units.damping[(n + i, n + i)] = tick * damper.damping / damper.inertia;
            units.lengths.push((damper.inertia / mass).sqrt());
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
        DMatrix::from_fn(rows.nrows(), rows.ncols(), |i, j| rows[(i, j)] * l[j] / l[i])
    }

    /// Scaled rows on `N^-1 w / m` as rows in m/s^2 and rad/s^2 on w.
    fn on_wrench(&self, rows: DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(rows.nrows(), rows.ncols(), |i, j| rows[(i, j)] / (self.mass * l[j] * l[i]))
    }

    fn side(&self, right: DVector<f64>) -> DVector<f64> {
        DVector::from_fn(right.len(), |i, _| right[i] / self.lengths[i])
    }

    /// Scaled forces on coordinates from `first` on, from `N a`, as forces from a.
    fn force_on_acceleration(&self, first: usize, rows: DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(rows.nrows(), rows.ncols(), |i, j| rows[(i, j)] * self.mass * l[first + i] * l[j])
    }

    /// The same from `N^-1 w / m`, as forces from w.
    fn force_on_wrench(&self, first: usize, rows: DMatrix<f64>) -> DMatrix<f64> {
        let l = &self.lengths;
        DMatrix::from_fn(rows.nrows(), rows.ncols(), |i, j| rows[(i, j)] * l[first + i] / l[j])
    }

    fn force(&self, first: usize, right: DVector<f64>) -> DVector<f64> {
        DVector::from_fn(right.len(), |i, _| right[i] * self.mass * self.lengths[first + i])
    }
}

/// Response of `x'' = p - K x - C x'` from rest to a unit step of each component of p, after unit time; K acts on the first n of N
/// coordinates.
struct StepResponse {
    /// x', N x N.
    velocity: DMatrix<f64>,
    /// x, N x N.
    position: DMatrix<f64>,
    /// `int x`, N x N.
    integral: DMatrix<f64>,
    /// `int int x` of the first n coordinates, n x N.
    double_integral: DMatrix<f64>,
}

impl StepResponse {
    /// `k` is N x n, `c` is N x N. The state is (x of the first n, x' of all). None where the norm is beyond all doublings.
    fn new(k: &DMatrix<f64>, c: &DMatrix<f64>) -> Option<StepResponse> {
        let (size, n) = (k.nrows(), k.ncols());
        let mut z = DMatrix::zeros(n + size, n + size);
        for i in 0..n {
            z[(i, n + i)] = 1.0;
        }
        z.view_mut((n, 0), (size, n)).copy_from(&-k);
        z.view_mut((n, n), (size, size)).copy_from(&-c);
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
        let mut phi = Phi::series(&(z * shrink), size);
        for _ in 0..doublings {
            phi = phi.doubled();
        }
        let below = |m: &DMatrix<f64>| m.rows(n, size).into_owned();
        Some(StepResponse {
            velocity: below(&phi.first),
            position: below(&phi.second),
            integral: below(&phi.third),
            double_integral: phi.third.rows(0, n).into_owned(),
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
        // From the last term, each bracket divided by the factorial's next factor.
        let mut bracket = identity.clone();
        for i in (1..=TAYLOR_TERMS).rev() {
            bracket = &identity + (z * &bracket) / (i + 3) as f64;
        }
        let third = bracket / 6.0;
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
