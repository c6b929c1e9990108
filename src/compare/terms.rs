//! What our terms look like under a set of conventions.
//!
//! What enters the computation (state, gravity, rotor inertia, axes) is changed before it; what concerns the way
//! results are written is applied after it: point and axes of momentum, axes of rows, angular before linear, order of joints.

use std::sync::Arc;

use nalgebra::{DMatrix, DVector, Vector6};

use super::assumption::{Assumption, QuaternionMistake};
use super::{Given, table};
use crate::model::Model;
use crate::problem::question::DynamicsQuestion;
use crate::reference;
use crate::reference::answer::{DynamicsReport, FrameReport};
use crate::spatial::{Mat3, Vec3, quaternion_of, rotation_from_quaternion, stack};

/// Terms as somebody sees them.
#[derive(Debug, Clone)]
pub struct Terms {
    /// Mass matrix.
    pub mass_matrix: Option<DMatrix<f64>>,
    /// Bias.
    pub bias: Option<DVector<f64>>,
    /// Momentum.
    pub momentum: Option<Vector6<f64>>,
    /// Jacobian and `J_dot nu` of every frame of the report.
    pub frames: Vec<FrameTerms>,
}

/// Jacobian and `J_dot nu` of one frame.
pub type FrameTerms = (Option<DMatrix<f64>>, Option<Vector6<f64>>);

/// About which point angular momentum is taken.
#[derive(Debug, Clone, Copy, PartialEq)]
enum About {
    CenterOfMass,
    Base,
    Origin,
}

/// A question, and how its results are written.
#[derive(Debug, Clone)]
pub struct Scenario {
    question: DynamicsQuestion,
    friction: bool,
    negated: bool,
    at_rest: bool,
    columns: bool,
    rows: bool,
    frame_axes: bool,
    spatial: bool,
    about: About,
    momentum_in_base: bool,
    order: Option<Vec<usize>>,
}

impl Scenario {
    /// The question as we take it.
    pub fn new(question: &DynamicsQuestion) -> Self {
        Scenario {
            question: question.clone(),
            friction: false,
            negated: false,
            at_rest: false,
            columns: false,
            rows: false,
            frame_axes: false,
            spatial: false,
            about: About::CenterOfMass,
            momentum_in_base: false,
            order: None,
        }
    }

    /// The same under one more convention.
    pub fn with(&self, assumption: &Assumption) -> Scenario {
        let mut new = self.clone();
        match assumption {
            Assumption::VelocityAxes(axes) => new.question.velocity_axes = *axes,
            Assumption::VelocityReadIn(axes) => {
                let rotation = self.question.state.base_pose.rotation;
                let numbers = self.question.velocity_axes.twist_from_world(&rotation, &self.question.state.base_twist);
                new.question.state.base_twist = axes.twist_to_world(&rotation, &numbers);
                new.question.velocity_axes = *axes;
            }
            Assumption::Quaternion(mistake) => new.turn(*mistake),
            Assumption::Gravity(factor) => new.question.gravity *= *factor,
            Assumption::NoRotorInertia => {
                let mut model = Model::clone(&self.question.model);
                model.joints.iter_mut().for_each(|joint| joint.rotor_inertia = 0.0);
                new.question.model = Arc::new(model);
            }
            Assumption::FrictionInBias => new.friction = true,
            Assumption::BiasNegated => new.negated = true,
            Assumption::BiasAtRest => new.at_rest = true,
            Assumption::AngularFirst { columns, rows } => (new.columns, new.rows) = (*columns, *rows),
            Assumption::FrameAxes => new.frame_axes = true,
            Assumption::SpatialAcceleration => new.spatial = true,
            Assumption::MomentumAboutBase => new.about = About::Base,
            Assumption::MomentumAboutOrigin => new.about = About::Origin,
            Assumption::MomentumInBaseAxes => new.momentum_in_base = true,
            Assumption::JointOrder { order, .. } => new.order = Some(order.clone()),
            Assumption::StateInOrder { order, .. } => {
                let state = &self.question.state;
                for (i, j) in order.iter().enumerate() {
                    new.question.state.position[*j] = state.position[i];
                    new.question.state.velocity[*j] = state.velocity[i];
                }
                new.order = Some(order.clone());
            }
        }
        new
    }

    /// Takes the quaternion's numbers otherwise. The numbers of the base velocity stay what they are in the user's axes.
    fn turn(&mut self, mistake: QuaternionMistake) {
        let state = &mut self.question.state;
        let numbers = self.question.velocity_axes.twist_from_world(&state.base_pose.rotation, &state.base_twist);
        let [x, y, z, w] = quaternion_of(&state.base_pose.rotation);
        state.base_pose.rotation = rotation_from_quaternion(&match mistake {
            QuaternionMistake::ReadScalarFirst => [y, z, w, x],
            QuaternionMistake::ReadScalarLast => [w, x, y, z],
            QuaternionMistake::Inverse => [-x, -y, -z, w],
        });
        state.base_twist = self.question.velocity_axes.twist_to_world(&state.base_pose.rotation, &numbers);
    }

    /// The terms.
    pub fn terms(&self) -> Terms {
        let report = reference::dynamics(&self.question);
        let mut terms = Terms {
            mass_matrix: Some(dense(&report.mass_matrix)),
            bias: Some(self.bias(&report)),
            momentum: Some(self.momentum(&report)),
            frames: report.frames.iter().map(|frame| self.frame(frame)).collect(),
        };
        self.rearrange(&mut terms);
        terms
    }

    fn bias(&self, report: &DynamicsReport) -> DVector<f64> {
        let mut bias = DVector::from_vec(report.bias.clone());
        if self.at_rest {
            let mut still = self.question.clone();
            still.state.base_twist = crate::spatial::Twist::zero();
            still.state.velocity.iter_mut().for_each(|speed| *speed = 0.0);
            bias = DVector::from_vec(reference::dynamics(&still).bias);
        }
        if self.friction {
            bias += DVector::from_vec(report.friction.clone());
        }
        if self.negated { -bias } else { bias }
    }

    fn momentum(&self, report: &DynamicsReport) -> Vector6<f64> {
        let [linear, angular] = report.momentum;
        let pose = &self.question.state.base_pose;
        let arm = match self.about {
            About::CenterOfMass => Vec3::zeros(),
            About::Base => report.center_of_mass - pose.translation,
            About::Origin => report.center_of_mass,
        };
        let turn = if self.momentum_in_base { pose.rotation.transpose() } else { Mat3::identity() };
        stack(&(turn * linear), &(turn * (angular + arm.cross(&linear))))
    }

    fn frame(&self, frame: &FrameReport) -> FrameTerms {
        let mut jacobian = dense(&frame.jacobian);
        let [mut linear, mut angular] = frame.bias_acceleration;
        if self.spatial {
            linear -= frame.twist[1].cross(&frame.twist[0]);
        }
        if self.frame_axes {
            let turn = rotation_from_quaternion(&frame.orientation).transpose();
            for start in [0, 3] {
                let turned = turn * jacobian.rows(start, 3);
                jacobian.rows_mut(start, 3).copy_from(&turned);
            }
            linear = turn * linear;
            angular = turn * angular;
        }
        (Some(jacobian), Some(stack(&linear, &angular)))
    }

    /// Angular before linear, and the order of joints.
    fn rearrange(&self, terms: &mut Terms) {
        let model = &self.question.model;
        let offset = model.joint_offset();
        let mut columns: Vec<usize> = (0..model.velocities()).collect();
        if self.columns && offset == 6 {
            columns[..6].copy_from_slice(&[3, 4, 5, 0, 1, 2]);
        }
        if let Some(order) = &self.order {
            for (i, j) in order.iter().enumerate() {
                columns[offset + i] = offset + j;
            }
        }
        let rows: [usize; 6] = if self.rows { [3, 4, 5, 0, 1, 2] } else { [0, 1, 2, 3, 4, 5] };
        let six = |v: &Vector6<f64>| Vector6::from_fn(|i, _| v[rows[i]]);
        terms.mass_matrix = terms.mass_matrix.as_ref().map(|m| m.select_rows(&columns).select_columns(&columns));
        terms.bias = terms.bias.as_ref().map(|h| h.select_rows(&columns));
        terms.momentum = terms.momentum.as_ref().map(six);
        for (jacobian, bias) in &mut terms.frames {
            *jacobian = jacobian.as_ref().map(|j| j.select_rows(&rows).select_columns(&columns));
            *bias = bias.as_ref().map(six);
        }
    }
}

/// Largest relative difference between two sets of our terms, over what was given.
pub fn difference(question: &DynamicsQuestion, given: &Given, ours: &Terms, others: &Terms) -> f64 {
    let posed = Given {
        mass_matrix: given.mass_matrix.as_ref().and(others.mass_matrix.clone()),
        bias: given.bias.as_ref().and(others.bias.clone()),
        momentum: given.momentum.as_ref().and(others.momentum),
        frames: given
            .frames
            .iter()
            .map(|frame| {
                let (jacobian, bias) = others.frames.get(frame.index).cloned().unwrap_or_default();
                super::GivenFrame {
                    index: frame.index,
                    jacobian: frame.jacobian.as_ref().and(jacobian),
                    bias_acceleration: frame.bias_acceleration.as_ref().and(bias),
                }
            })
            .collect(),
    };
    table::largest(&table::tables(question, &posed, ours))
}

fn dense(rows: &[Vec<f64>]) -> DMatrix<f64> {
    let columns = rows.first().map_or(0, Vec::len);
    DMatrix::from_fn(rows.len(), columns, |i, j| rows[i][j])
}
