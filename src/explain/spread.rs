//! How far torques and margins spread when stiffness and damping are only known with an error.
//!
//! The relative errors (of k, of b) are normal with the given covariance, either the same under every sole or drawn
//! for each. Two ways that must agree:
//! - sigma points: `+-sqrt(n) L_i`, n the number of errors, L the Cholesky factor; mean and variance are their averages
//!   (exact for answers quadratic in the errors up to the mean, and for linear ones up to the variance). The probability that
//!   a margin stays positive is that of a normal variable with this mean and deviation;
//! - samples: draws from a seeded generator, each question answered in full; the probability is a count.

use super::random::Random;
use super::vary::{Parameter, ParameterKind, varied};
use super::ExplainError;
use crate::contact::Law;
use crate::problem::question::{Question, SpreadAim};

/// Most samples of one request.
pub const MOST_SAMPLES: usize = 2000;
/// Stiffness and damping are not taken below this part of their stated values; draws that would go there are counted.
pub const LEAST_FACTOR: f64 = 0.05;

/// Torques and margins of one variation.
#[derive(Debug, Clone, PartialEq)]
pub struct Outcome {
    /// Torque per joint.
    pub torques: Vec<f64>,
    /// Margin per limit block, in the order of the answer's margins.
    pub margins: Vec<f64>,
}

/// Mean and spread by one of the two ways.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Moments {
    /// Variations that have an answer.
    pub answered: usize,
    /// Variations without one (infeasible or not confirmed); they count as margins lost.
    pub failed: usize,
    /// Draws cut off at [`LEAST_FACTOR`].
    pub cut: usize,
    /// Mean torque per joint.
    pub torque_mean: Vec<f64>,
    /// Standard deviation of the torque per joint.
    pub torque_deviation: Vec<f64>,
    /// Mean margin per limit.
    pub margin_mean: Vec<f64>,
    /// Standard deviation of the margin per limit.
    pub margin_deviation: Vec<f64>,
    /// Probability that the margin is not negative, per limit.
    pub margin_positive: Vec<f64>,
}

/// Spread of an answer.
#[derive(Debug, Clone, PartialEq)]
pub struct Spread {
    /// By sigma points.
    pub sigma_points: Moments,
    /// By seeded samples; none where no samples were asked for.
    pub samples: Option<Moments>,
    /// The seed of the samples.
    pub seed: u64,
}

/// A margin this far below zero (in its own unit) is rounding at a limit that binds.
const TOUCHING: f64 = 1e-6;

/// Works out the spread; `evaluate` answers one variation of the question, none where it has no answer.
pub fn spread<E: From<ExplainError>>(
    question: &Question,
    aim: &SpreadAim,
    evaluate: &mut dyn FnMut(&Question) -> Result<Option<Outcome>, E>,
) -> Result<Spread, E> {
    let factor = cholesky(&aim.covariance);
    let soft: Vec<usize> =
        (0..question.contacts.len()).filter(|&c| matches!(question.contacts[c].ground.law, Law::Bonded(_))).collect();
    let sources = if aim.shared { 1.min(soft.len()) } else { soft.len() };
    let errors = 2 * sources;
    let reach = (errors as f64).sqrt();
    let mut sigma = Collected::default();
    for (i, sign) in (0..errors).flat_map(|i| [(i, 1.0), (i, -1.0)]) {
        let mut standard = vec![0.0; errors];
        standard[i] = sign * reach;
        sigma.take(question, aim, &soft, &factor, &standard, evaluate)?;
    }
    if errors == 0 {
        sigma.take(question, aim, &soft, &factor, &[], evaluate)?;
    }
    let mut random = Random::new(aim.seed);
    let mut drawn = Collected::default();
    for _ in 0..aim.samples.min(MOST_SAMPLES) {
        let standard: Vec<f64> = (0..errors).map(|_| random.normal()).collect();
        drawn.take(question, aim, &soft, &factor, &standard, evaluate)?;
    }
    Ok(Spread {
        sigma_points: sigma.moments(true),
        samples: (aim.samples > 0).then(|| drawn.moments(false)),
        seed: aim.seed,
    })
}

/// Lower factor of a 2 x 2 covariance; a deviation of zero leaves its row zero.
fn cholesky(c: &[[f64; 2]; 2]) -> [[f64; 2]; 2] {
    let first = c[0][0].max(0.0).sqrt();
    let cross = if first > 0.0 { c[1][0] / first } else { 0.0 };
    [[first, 0.0], [cross, (c[1][1] - cross * cross).max(0.0).sqrt()]]
}

#[derive(Default)]
struct Collected {
    outcomes: Vec<Outcome>,
    failed: usize,
    cut: usize,
}

impl Collected {
    fn take<E>(
        &mut self,
        question: &Question,
        aim: &SpreadAim,
        soft: &[usize],
        factor: &[[f64; 2]; 2],
        standard: &[f64],
        evaluate: &mut dyn FnMut(&Question) -> Result<Option<Outcome>, E>,
    ) -> Result<(), E> {
        let mut varying = question.clone();
        for (place, &contact) in soft.iter().enumerate() {
            let own = standard.get(if aim.shared { 0 } else { 2 * place }..).unwrap_or(&[]);
            let [u, v] = [own.first().copied().unwrap_or(0.0), own.get(1).copied().unwrap_or(0.0)];
            let relative = [factor[0][0] * u, factor[1][0] * u + factor[1][1] * v];
            for (kind, error) in [ParameterKind::Stiffness, ParameterKind::Damping].into_iter().zip(relative) {
                self.cut += usize::from(1.0 + error < LEAST_FACTOR);
                varying = varied(&varying, Parameter { contact, kind }, (1.0 + error).max(LEAST_FACTOR));
            }
        }
        match evaluate(&varying)? {
            Some(outcome) => self.outcomes.push(outcome),
            None => self.failed += 1,
        }
        Ok(())
    }

    fn moments(&self, normal: bool) -> Moments {
        let (torque_mean, torque_deviation) = mean_and_deviation(&self.outcomes, |o| &o.torques);
        let (margin_mean, margin_deviation) = mean_and_deviation(&self.outcomes, |o| &o.margins);
        let all = (self.outcomes.len() + self.failed).max(1) as f64;
        let answered = self.outcomes.len() as f64 / all;
        let margin_positive = (0..margin_mean.len())
            .map(|i| {
                if normal {
                    answered * at_least(-TOUCHING, margin_mean[i], margin_deviation[i])
                } else {
                    let kept = self.outcomes.iter().filter(|o| o.margins.get(i).is_some_and(|m| *m >= -TOUCHING)).count();
                    kept as f64 / all
                }
            })
            .collect();
        Moments {
            answered: self.outcomes.len(),
            failed: self.failed,
            cut: self.cut,
            torque_mean,
            torque_deviation,
            margin_mean,
            margin_deviation,
            margin_positive,
        }
    }
}

fn mean_and_deviation(outcomes: &[Outcome], part: impl Fn(&Outcome) -> &Vec<f64>) -> (Vec<f64>, Vec<f64>) {
    let width = outcomes.iter().map(|o| part(o).len()).min().unwrap_or(0);
    let count = outcomes.len().max(1) as f64;
    let mean: Vec<f64> = (0..width).map(|i| outcomes.iter().map(|o| part(o)[i]).sum::<f64>() / count).collect();
    let deviation = (0..width)
        .map(|i| (outcomes.iter().map(|o| (part(o)[i] - mean[i]).powi(2)).sum::<f64>() / count).sqrt())
        .collect();
    (mean, deviation)
}

/// Probability that a normal variable is at least `bound`. A deviation that is rounding leaves a step.
fn at_least(bound: f64, mean: f64, deviation: f64) -> f64 {
    let above = mean - bound;
    if deviation <= TOUCHING * 1e-3 {
        return if above >= 0.0 { 1.0 } else { 0.0 };
    }
    normal_distribution(above / deviation)
}

/// The normal distribution function, `erfc(-x / sqrt 2) / 2`, by the rational form 7.1.26 of Abramowitz & Stegun
/// (published, quoted from memory; error at most 1.5e-7).
fn normal_distribution(x: f64) -> f64 {
    let y = x.abs() / std::f64::consts::SQRT_2;
    let t = 1.0 / (1.0 + 0.3275911 * y);
    let series = ((((1.061405429 * t - 1.453152027) * t + 1.421413741) * t - 0.284496736) * t + 0.254829592) * t;
    let tail = 0.5 * series * (-y * y).exp();
    if x >= 0.0 { 1.0 - tail } else { tail }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_normal_distribution_meets_its_tables() {
        // Published, quoted from memory (any table): Phi(1) = .8413447, Phi(1.959964) = .975, Phi(0) = .5.
        for (x, p) in [(1.0, 0.8413447), (1.959964, 0.975), (0.0, 0.5), (-1.0, 0.1586553)] {
            assert!((normal_distribution(x) - p).abs() < 2e-7, "{x}");
        }
    }

    #[test]
    fn a_factor_gives_its_covariance_back() {
        let c = [[0.04, 0.012], [0.012, 0.01]];
        let l = cholesky(&c);
        // Derived: L L' = C.
        for (i, j) in [(0, 0), (1, 0), (1, 1)] {
            let product: f64 = (0..2).map(|k| l[i][k] * l[j][k]).sum();
            assert!((product - c[i][j]).abs() < 1e-17, "{i} {j}");
        }
        assert_eq!(cholesky(&[[0.0, 0.0], [0.0, 0.01]]), [[0.0, 0.0], [0.0, 0.1]]);
    }
}
