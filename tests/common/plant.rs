//! The full nonlinear robot on bonded ground in steps of 10 us under held torques: what a tick rule has to predict.
#![allow(dead_code)]

use nalgebra::{DMatrix, DVector};
use underfoot::contact::law::bonded_wrench;
use underfoot::contact::{Law, Patch, SoleMotion, rest, tick};
use underfoot::dynamics::{self, Workspace};
use underfoot::model::State;
use underfoot::problem::question::Question;
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Pose, Twist, Vec3, Vec6, Wrench, exp_so3};

/// What one tick did.
pub struct Outcome {
    /// Wrench of each contact at the end (zero on rigid ground).
    pub ends: Vec<Wrench>,
    /// Wrench of each contact at the start.
    pub starts: Vec<Wrench>,
    /// Average wrench of each contact.
    pub means: Vec<Wrench>,
    /// Average generalised acceleration.
    pub acceleration: DVector<f64>,
}

/// Rest poses at the start, fixed there; rigid soles have none.
fn rest_poses(question: &Question, ws: &Workspace) -> Vec<Option<Pose>> {
    let model = &*question.model;
    let mut out = Vec::new();
    for contact in &question.contacts {
        let sole = &model.soles[contact.sole];
        let motion = sole_motion(question, ws, contact.sole);
        let patch = Patch { shape: &sole.shape, ground: &contact.ground };
        let soft = matches!(contact.ground.law, Law::Bonded(_));
        out.push(soft.then(|| rest::resolve(&patch, &motion).unwrap()));
    }
    out
}

fn sole_motion(question: &Question, ws: &Workspace, sole: usize) -> SoleMotion {
    let model = &*question.model;
    let sole = &model.soles[sole];
    SoleMotion {
        pose: dynamics::frame_pose(model, ws, sole.body, &sole.placement),
        twist: dynamics::frame_twist(model, ws, sole.body, &sole.placement),
    }
}

struct Plant<'a> {
    question: &'a Question,
    rests: Vec<Option<Pose>>,
    /// Measured minus modelled at the start.
    correction: Vec<Vec6>,
    torques: DVector<f64>,
}

impl Plant<'_> {
    fn law(&self, ws: &Workspace, index: usize, time: f64) -> Wrench {
        let contact = &self.question.contacts[index];
        let (Law::Bonded(material), Some(rest)) = (contact.ground.law, self.rests[index]) else { return Wrench::zero() };
        let ground = &contact.ground;
        let (rest, normal) = tick::advance_ground(&ground.normal, &rest, &ground.rest_twist, time);
        let shape = &self.question.model.soles[contact.sole].shape;
        let law = bonded_wrench(shape, &material, &normal, &rest, &ground.rest_twist, &sole_motion(self.question, ws, contact.sole));
        Wrench::from_vec6(&(law.to_vec6() + self.correction[index]))
    }

    /// Acceleration and soft wrenches at a state; rigid soles are held by their constraint.
    fn rates(&self, ws: &mut Workspace, state: &State, time: f64) -> (DVector<f64>, Vec<Wrench>) {
        let model = &*self.question.model;
        let mut force = self.torques.clone();
        ws.update(model, state, &self.question.gravity);
        for load in &self.question.external {
            let frame = &model.frames[load.frame];
            let at = frame.placement.compose(&Pose { translation: load.point, ..Pose::identity() });
            let point = dynamics::frame_pose(model, ws, frame.body, &at).translation;
            dynamics::external_generalised_force(model, ws, frame.body, &point, &load.wrench, &mut force);
        }
        let mut wrenches = Vec::new();
        let nv = model.velocities();
        let (mut rigid, mut wanted) = (Vec::new(), Vec::new());
        for (i, contact) in self.question.contacts.iter().enumerate() {
            let sole = &model.soles[contact.sole];
            let wrench = self.law(ws, i, time);
            wrenches.push(wrench);
            let origin = dynamics::frame_pose(model, ws, sole.body, &sole.placement).translation;
            dynamics::external_generalised_force(model, ws, sole.body, &origin, &wrench, &mut force);
            if matches!(contact.ground.law, Law::Rigid { .. }) {
                let rows = if sole.shape == SoleShape::Point { 3 } else { 6 };
                let mut jacobian = DMatrix::zeros(6, nv);
                dynamics::frame_jacobian(model, ws, sole.body, &sole.placement, &mut jacobian);
                let bias = dynamics::frame_bias_acceleration(model, ws, sole.body, &sole.placement);
                for k in 0..rows {
                    rigid.push(jacobian.row(k).into_owned());
                    wanted.push(-bias[k]);
                }
            }
        }
        let acceleration = if rigid.is_empty() {
            dynamics::forward_dynamics(model, ws, state, &self.question.gravity, &force).unwrap()
        } else {
            let n = nv + rigid.len();
            let mut matrix = DMatrix::zeros(n, n);
            let mut right = DVector::zeros(n);
            matrix.view_mut((0, 0), (nv, nv)).copy_from(&ws.mass_matrix);
            for i in 0..nv {
                right[i] = force[i] - ws.bias[i] - ws.friction[i];
            }
            for (k, row) in rigid.iter().enumerate() {
                for j in 0..nv {
                    matrix[(nv + k, j)] = row[j];
                    matrix[(j, nv + k)] = -row[j];
                }
                right[nv + k] = wanted[k];
            }
            matrix.lu().solve(&right).unwrap().rows(0, nv).into_owned()
        };
        (acceleration, wrenches)
    }
}

/// The state carried on along `velocity` for dt, with velocities `velocity_after`.
fn moved(state: &State, floating: bool, velocity: &[f64], velocity_after: &[f64], dt: f64) -> State {
    let offset = if floating { 6 } else { 0 };
    let mut out = state.clone();
    if floating {
        let v = Vec3::from_column_slice(&velocity[..3]);
        let w = Vec3::from_column_slice(&velocity[3..6]);
        out.base_pose.translation += v * dt;
        out.base_pose.rotation = exp_so3(&(w * dt)) * out.base_pose.rotation;
        out.base_twist = Twist::from_vec6(&Vec6::from_column_slice(&velocity_after[..6]));
    }
    for j in 0..out.position.len() {
        out.position[j] += velocity[offset + j] * dt;
    }
    out.velocity.copy_from_slice(&velocity_after[offset..]);
    out
}

fn velocities(state: &State, floating: bool) -> Vec<f64> {
    let mut out = Vec::new();
    if floating {
        out.extend_from_slice(state.base_twist.to_vec6().as_slice());
    }
    out.extend_from_slice(&state.velocity);
    out
}

/// One tick of `question` under `torques` in RK4 steps of about `step` (s); measured wrenches correct the law by a constant.
pub fn tick_under(question: &Question, torques: &[f64], step: f64) -> Outcome {
    let model = &*question.model;
    let floating = model.joint_offset() == 6;
    let nv = model.velocities();
    let mut ws = Workspace::new(model);
    ws.update(model, &question.state, &question.gravity);
    let mut generalised = DVector::zeros(nv);
    for (j, joint) in model.joints.iter().enumerate() {
        generalised[model.joint_offset() + j] = if joint.actuated { torques[j] } else { 0.0 };
    }
    let contacts = question.contacts.len();
    let mut plant =
        Plant { question, rests: rest_poses(question, &ws), correction: vec![Vec6::zeros(); contacts], torques: generalised };
    for (i, contact) in question.contacts.iter().enumerate() {
        if let (Some(measured), Law::Bonded(_)) = (contact.ground.measured, contact.ground.law) {
            plant.correction[i] = measured.to_vec6() - plant.law(&ws, i, 0.0).to_vec6();
        }
    }
    let length = question.tick.length;
    let steps = (length / step).round().max(1.0) as usize;
    let h = length / steps as f64;
    let mut state = question.state.clone();
    let first = DVector::from_vec(velocities(&state, floating));
    let mut sums = vec![Vec6::zeros(); contacts];
    let mut starts = Vec::new();
    for s in 0..steps {
        let t = s as f64 * h;
        let v1 = DVector::from_vec(velocities(&state, floating));
        let (a1, w1) = plant.rates(&mut ws, &state, t);
        if s == 0 {
            starts = w1.clone();
        }
        let v2 = &v1 + &a1 * (h / 2.0);
        let (a2, w2) = plant.rates(&mut ws, &moved(&state, floating, v1.as_slice(), v2.as_slice(), h / 2.0), t + h / 2.0);
        let v3 = &v1 + &a2 * (h / 2.0);
        let (a3, w3) = plant.rates(&mut ws, &moved(&state, floating, v2.as_slice(), v3.as_slice(), h / 2.0), t + h / 2.0);
        let v4 = &v1 + &a3 * h;
        let (a4, w4) = plant.rates(&mut ws, &moved(&state, floating, v3.as_slice(), v4.as_slice(), h), t + h);
        let velocity = (&v1 + (&v2 + &v3) * 2.0 + &v4) / 6.0;
        let after = &v1 + (a1 + (a2 + a3) * 2.0 + a4) * (h / 6.0);
        for i in 0..contacts {
            sums[i] += (w1[i].to_vec6() + (w2[i].to_vec6() + w3[i].to_vec6()) * 2.0 + w4[i].to_vec6()) / (6.0 * steps as f64);
        }
        state = moved(&state, floating, velocity.as_slice(), after.as_slice(), h);
    }
    let (_, ends) = plant.rates(&mut ws, &state, length);
    let acceleration = (DVector::from_vec(velocities(&state, floating)) - first) / length;
    Outcome { ends, starts, means: sums.iter().map(Wrench::from_vec6).collect(), acceleration }
}
