//! Noise on the motion biases the estimate: least squares takes errors of the regressor for signal.
//!
//! With rows `H = H0 + errors`, `E[H'H] = H0'H0 + M`, M the information that noise alone brings. The estimate then
//! converges to `x_hat = (I - P M) x`, so that its bias is `-P M (I - P M)^-1 x_hat` (errors in variables: Fuller 1987,
//! Measurement Error Models; quoted from memory). M follows from the noise of pose and twist through the columns of the
//! law.
//!
//! Where that noise is not given it is read from fourth differences, which a smooth motion hardly has: for white
//! noise of variance s^2 their mean square is 70 s^2 (after Gasser, Sroka, Jennen-Steinmetz 1986, Biometrika
//! 73:625-633; quoted from memory). On rough motion that is an upper bound.

use nalgebra::DMatrix;

use super::parameters::Parameter;
use super::regressor::{Motion, Sole, columns};
use crate::spatial::{Mat6, Pose, Twist, Vec3, Vec6, exp_so3, log_so3, stack};

/// Sum of squares of (1, -4, 6, -4, 1).
const FOURTH_SQUARES: f64 = 70.0;
/// Samples that a fourth difference spans.
const SPAN: usize = 5;
/// Turn and displacement by which columns are differentiated (rad, m; m/s and rad/s for velocities).
const STEP: f64 = 1e-6;

/// Fourth differences of pose and twist.
#[derive(Debug, Clone, Default)]
pub struct MotionNoise {
    recent: Vec<Motion>,
    count: u64,
    squares: [f64; 4],
}

impl MotionNoise {
    /// Takes the next sample of the same stretch.
    pub fn push(&mut self, motion: &Motion) {
        if self.recent.len() == SPAN {
            self.recent.rotate_left(1);
            self.recent.pop();
        }
        self.recent.push(*motion);
        let [a, b, c, d, e] = self.recent.as_slice() else { return };
        let turn = |m: &Motion| log_so3(&(m.pose.rotation * c.pose.rotation.transpose()));
        let fourth = |f: &dyn Fn(&Motion) -> Vec3| (f(a) - f(b) * 4.0 + f(c) * 6.0 - f(d) * 4.0 + f(e)).norm_squared() / 3.0;
        self.squares[0] += fourth(&|m| m.pose.translation - c.pose.translation);
        self.squares[1] += fourth(&turn);
        self.squares[2] += fourth(&|m| m.twist.linear);
        self.squares[3] += fourth(&|m| m.twist.angular);
        self.count += 1;
    }

    /// The next sample does not follow on the last one.
    pub fn interrupt(&mut self) {
        self.recent.clear();
    }

    /// Standard deviations of position (m), rotation (rad), linear (m/s) and angular velocity (rad/s).
    pub fn deviations(&self) -> [f64; 4] {
        if self.count == 0 {
            return [0.0; 4];
        }
        self.squares.map(|sum| (sum / (self.count as f64 * FOURTH_SQUARES)).sqrt())
    }
}

/// The information that noise brings in one sample: `C_jk = sum over axes of variance * dh_j . dh_k`, rows whitened by
/// `noise` (standard deviations of the wrench, sole axes), parameters in units of `scale`.
pub fn information(sole: &Sole, parameters: &[Parameter], scale: &[f64], noise: &Vec6, deviations: &[f64; 4]) -> DMatrix<f64> {
    let n = parameters.len();
    let level = Motion { pose: Pose::identity(), twist: Twist::zero() };
    let rest = Pose::identity();
    let at = |motion: &Motion| {
        let mut out = vec![Vec6::zeros(); n];
        columns(sole, parameters, &Vec3::z(), &rest, &Mat6::zeros(), motion, &mut out);
        out
    };
    let still = at(&level);
    let mut information = DMatrix::zeros(n, n);
    for axis in 0..3 {
        let step = Vec3::ith(axis, STEP);
        let moved = [
            Motion { pose: Pose { translation: step, ..level.pose }, ..level },
            Motion { pose: Pose { rotation: exp_so3(&step), ..level.pose }, ..level },
            Motion { twist: Twist::from_vec6(&stack(&step, &Vec3::zeros())), ..level },
            Motion { twist: Twist::from_vec6(&stack(&Vec3::zeros(), &step)), ..level },
        ];
        for (motion, deviation) in moved.iter().zip(deviations) {
            let slopes: Vec<Vec6> = at(motion)
                .iter()
                .zip(&still)
                .zip(scale)
                .map(|((now, before), scale)| ((now - before) * (scale * deviation / STEP)).component_div(noise))
                .collect();
            for j in 0..n {
                for k in 0..n {
                    information[(j, k)] += slopes[j].dot(&slopes[k]);
                }
            }
        }
    }
    information
}

/// `-P M (I - P M)^-1 x`; none where `I - P M` is singular, for then noise alone could have made the estimate.
pub fn bias(memory: &DMatrix<f64>, information: &DMatrix<f64>, value: &[f64]) -> Option<Vec<f64>> {
    let n = value.len();
    let product = memory * information;
    let x = nalgebra::DVector::from_column_slice(value);
    let truth = (DMatrix::identity(n, n) - &product).lu().solve(&x)?;
    let bias = -(product * truth);
    bias.iter().all(|b| b.is_finite()).then(|| bias.iter().copied().collect())
}
