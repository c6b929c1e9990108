//! Does the assembled problem say what the physics says?
//!
//! The problem's physics rows are affine in the unknowns, and so are balance and ground law. They are
//! compared at the answer and at seeded points around it:
//! - group `dynamics`: row by row, `scale (A x - b)` must be the residual of the balance (or, for all rows
//!   together, its negative);
//! - groups `contact:<sole>` and `vertices:<sole>`: for any acceleration (any vertex forces) the rows, solved for
//!   w+, must give the wrench of the law (the sum of the forces). On rigid ground the rows hold no wrench:
//!   they must vanish at an acceleration that moves the sole as prescribed, and fix the sole's
//!   whole acceleration. Where the joints allow no such acceleration there is no answer to certify.
//!
//!
//! Under the rule `held` the rows of all soft soles hold together, and friction is part of them: the points compared are then ticks
//! played by `held` under the point's torques and a force of any size besides. There the contact rows must vanish, the rows of the dynamics
//! must leave exactly that force, and the contact rows must be independent, as many as there are wrenches.
//!
//! Columns are found by name: `acceleration:<..>` in the order of the generalised velocity,
//! `torque:<joint>`, `wrench:<sole>:<fx..mz>`, `vertex:<sole>:<i>:<x|y|z>`; physical = scaled * scale.

use nalgebra::{DMatrix, DVector};

use super::friction::spread;
use super::held::Played;
use super::physics::{PHYSICS_BOUND, gathered, vertex_arms};
use super::rows::row_size;
use super::situation::Situation;
use super::worst::Worst;
use super::{Check, Claim};
use crate::conic::Hierarchy;
use crate::contact::Law;
use crate::spatial::{Twist, Vec3, Vec6, Wrench};

/// Points at which rows are compared, beside the answer.
const PROBES: usize = 3;
/// Share of the largest singular value below which a direction counts as missing.
const MISSING: f64 = 1e-13;

/// The same where a sole's whole acceleration is concerned, whose Jacobian may lack directions.
const LOST: f64 = 1e-11;
/// Share of the acceleration by which a prescribed one is missed where the joints do not allow it.
const UNREACHED: f64 = 1e-7;
/// Sweeps of a singular value decomposition.
const MAX_SWEEPS: usize = 10_000;

type Decomposed = nalgebra::SVD<f64, nalgebra::Dyn, nalgebra::Dyn>;

/// Singular values with vectors; none for an empty matrix or one with entries that are no numbers.
fn decompose(matrix: DMatrix<f64>) -> Option<Decomposed> {
    let sound = !matrix.is_empty() && matrix.iter().all(|v| v.is_finite());
    if sound { matrix.try_svd(true, true, f64::EPSILON, MAX_SWEEPS) } else { None }
}

/// Where each quantity sits among the columns.
struct Columns {
    acceleration: Vec<usize>,
    torque: Vec<Option<usize>>,
    wrench: Vec<[Option<usize>; 6]>,
    vertices: Vec<Vec<[usize; 3]>>,
    scale: Vec<f64>,
}

impl Columns {
    /// None where a column is missing.
    fn find(situation: &Situation, hierarchy: &Hierarchy) -> Option<Columns> {
        let model = &situation.question.model;
        let names: Vec<&str> = hierarchy.columns.iter().map(|c| c.name.as_str()).collect();
        let at = |name: String| names.iter().position(|n| *n == name);
        let starting = |prefix: &str| -> Vec<usize> {
            names.iter().enumerate().filter(|(_, n)| n.starts_with(prefix)).map(|(j, _)| j).collect()
        };
        let acceleration = starting("acceleration:");
        let torque: Vec<Option<usize>> =
            model.joints.iter().map(|joint| at(format!("torque:{}", joint.name))).collect();
        let complete = torque.iter().zip(&model.joints).all(|(t, joint)| t.is_some() || !joint.actuated);
        let (mut wrench, mut vertices) = (Vec::new(), Vec::new());
        for contact in &situation.question.contacts {
            let sole = situation.name(contact);
            let part = |p: &str| at(format!("wrench:{sole}:{p}"));
            wrench.push(["fx", "fy", "fz", "mx", "my", "mz"].map(part));
            let listed = starting(&format!("vertex:{sole}:"));
            vertices.push(listed.chunks_exact(3).map(|c| [c[0], c[1], c[2]]).collect());
        }
        let forces = wrench.iter().all(|w| w[..3].iter().all(Option::is_some));
        let scale = hierarchy.columns.iter().map(|c| c.scale).collect();
        (acceleration.len() == model.velocities() && complete && forces)
            .then_some(Columns { acceleration, torque, wrench, vertices, scale })
    }

    fn get(&self, x: &[f64], column: Option<usize>) -> f64 {
        column.map_or(0.0, |j| x[j] * self.scale[j])
    }

    fn set(&self, x: &mut [f64], column: Option<usize>, value: f64) {
        if let Some(j) = column {
            x[j] = value / self.scale[j];
        }
    }

    fn acceleration(&self, x: &[f64]) -> Vec<f64> {
        self.acceleration.iter().map(|&j| self.get(x, Some(j))).collect()
    }

    fn torques(&self, x: &[f64]) -> Vec<f64> {
        self.torque.iter().map(|&j| self.get(x, j)).collect()
    }

    fn wrench(&self, x: &[f64], i: usize) -> Wrench {
        Wrench::from_vec6(&Vec6::from_fn(|k, _| self.get(x, self.wrench[i][k])))
    }

    fn forces(&self, x: &[f64], i: usize) -> Vec<Vec3> {
        let force = |c: &[usize; 3]| Vec3::from_fn(|k, _| self.get(x, Some(c[k])));
        self.vertices[i].iter().map(force).collect()
    }
}

/// Numbers in [-1, 1), the same ones every time (a linear congruential generator).
struct Draw(u64);

impl Draw {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        (self.0 >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }
}

/// The answer and the points around it.
fn points(x: &[f64]) -> Vec<Vec<f64>> {
    let mut draw = Draw(20_011);
    let mut points = vec![x.to_vec()];
    for _ in 0..PROBES {
        points.push(x.iter().map(|v| v + draw.next() * v.abs().max(1.0)).collect());
    }
    points
}

/// The claim is the point x, read through the column names.
pub fn answer(situation: &Situation, claim: &Claim, hierarchy: &Hierarchy, x: &[f64]) -> Check {
    let mut worst = Worst::default();
    match Columns::find(situation, hierarchy) {
        None => worst.record(f64::NAN, || "columns missing".into()),
        Some(columns) => {
            let mut compare = |claimed: f64, column: Option<usize>| {
                let size = column.map_or(1.0, |j| (columns.scale[j] * x[j]).abs().max(columns.scale[j]));
                worst.record((claimed - columns.get(x, column)).abs() / size, || {
                    column.map_or("no column".into(), |j| hierarchy.columns[j].name.clone())
                });
            };
            columns.acceleration.iter().zip(claim.acceleration).for_each(|(&j, &a)| compare(a, Some(j)));
            columns.torque.iter().zip(claim.torques).for_each(|(&j, &t)| compare(t, j));
            for (i, wrench) in claim.wrenches.iter().enumerate() {
                let claimed = wrench.unwrap_or_else(super::situation::unknown_wrench).to_vec6();
                columns.wrench[i].iter().zip(claimed.iter()).for_each(|(&j, &w)| compare(w, j));
                for (c, force) in columns.vertices[i].iter().zip(&claim.vertex_forces[i]) {
                    c.iter().zip(force.iter()).for_each(|(&j, &f)| compare(f, Some(j)));
                }
            }
        }
    }
    worst.check("answer-point", "of the value or its natural size", PHYSICS_BOUND)
}

/// The physics rows against the physics, see the top of this file.
pub fn rows(situation: &Situation, hierarchy: &Hierarchy, x: &[f64]) -> Check {
    let mut worst = Worst::default();
    match Columns::find(situation, hierarchy) {
        None => worst.record(f64::NAN, || "columns missing".into()),
        Some(columns) => {
            let probe = Probe { situation, hierarchy, columns: &columns, points: points(x) };
            if situation.is_held() {
                probe.held(&mut worst);
            } else {
                probe.dynamics(&mut worst);
            }
            for i in 0..situation.question.contacts.len() {
                probe.contact(i, &mut worst);
                probe.vertices(i, &mut worst);
            }
        }
    }
    worst.check("problem-matches", "of weight and the terms of the row", PHYSICS_BOUND)
}

struct Probe<'a> {
    situation: &'a Situation<'a>,
    hierarchy: &'a Hierarchy,
    columns: &'a Columns,
    points: Vec<Vec<f64>>,
}

impl Probe<'_> {
    /// Indices of the physics rows of a group, in order.
    fn group(&self, name: &str) -> Vec<usize> {
        let names = self.hierarchy.hard.names.iter().enumerate();
        names.filter(|(_, n)| n.physics && n.group == name).map(|(i, _)| i).collect()
    }

    /// `A x - b` of a row.
    fn value(&self, i: usize, x: &[f64]) -> f64 {
        self.hierarchy.hard.matrix.row_dot(i, x) - self.hierarchy.hard.rhs[i]
    }

    fn dynamics(&self, worst: &mut Worst) {
        let rows = self.group("dynamics");
        if rows.len() != self.situation.question.model.velocities() {
            return worst.record(f64::NAN, || "dynamics rows missing".into());
        }
        // The sign of an equality is free, but it is one sign for all.
        let mut signs = [Worst::default(), Worst::default()];
        for x in &self.points {
            let ends: Vec<Wrench> = (0..self.columns.wrench.len()).map(|i| self.columns.wrench(x, i)).collect();
            let physics = self.situation.balance(&self.columns.acceleration(x), &self.columns.torques(x), &ends);
            self.compare_dynamics(&rows, x, &physics, &mut signs);
        }
        let [plain, negated] = signs;
        let better = if negated.value < plain.value { negated } else { plain };
        worst.record(better.value, || better.place);
    }

    /// Rows of the dynamics against the balance, taken as it is and negated.
    fn compare_dynamics(&self, rows: &[usize], x: &[f64], physics: &[f64], signs: &mut [Worst; 2]) {
        let names = &self.hierarchy.hard.names;
        for (k, &i) in rows.iter().enumerate() {
            let row = self.value(i, x) * names[i].scale;
            let terms = row_size(&self.hierarchy.hard.matrix, &self.hierarchy.hard.rhs, i, x) * names[i].scale;
            let size = self.situation.weight.max(terms);
            for (sign, side) in [1.0, -1.0].iter().zip(signs.iter_mut()) {
                side.record((row - sign * physics[k]).abs() / size, || {
                    format!("dynamics {}", self.situation.velocity_name(k))
                });
            }
        }
    }

    /// The rows under the rule `held`, see the top of this file.
    fn held(&self, worst: &mut Worst) {
        let (rows, names) = (self.group("dynamics"), &self.hierarchy.hard.names);
        let nv = self.situation.question.model.velocities();
        let offset = self.situation.question.model.joint_offset();
        if rows.len() != nv {
            return worst.record(f64::NAN, || "dynamics rows missing".into());
        }
        let mut draw = Draw(31_337);
        let forces: Vec<DVector<f64>> = self
            .points
            .iter()
            .enumerate()
            .map(|(p, x)| {
                let torques = self.columns.torques(x);
                let besides = if p == 0 { 0.0 } else { 1.0 };
                DVector::from_fn(nv, |k, _| {
                    let torque = if k < offset { 0.0 } else { torques[k - offset] };
                    torque + besides * draw.next() * names[rows[k]].scale
                })
            })
            .collect();
        let Some(played) = self.situation.held.as_ref().and_then(|held| held.play(&forces)) else {
            return worst.record(f64::NAN, || "the tick cannot be played".into());
        };
        let soft = self.soft_rows();
        self.independent(&soft, worst);
        let mut signs = [Worst::default(), Worst::default()];
        for (point, played) in self.points.iter().zip(&played) {
            let x = self.played_point(point, played);
            for &r in &soft {
                let size = row_size(&self.hierarchy.hard.matrix, &self.hierarchy.hard.rhs, r, &x).max(1.0);
                worst.record(self.value(r, &x).abs() / size, || format!("{} {}", names[r].group, names[r].part));
            }
            let ends: Vec<Wrench> = (0..self.columns.wrench.len()).map(|i| self.columns.wrench(&x, i)).collect();
            let physics = self.situation.held_balance(&played.acceleration, &self.columns.torques(&x), &ends, played);
            self.compare_dynamics(&rows, &x, &physics, &mut signs);
        }
        let [plain, negated] = signs;
        let better = if negated.value < plain.value { negated } else { plain };
        worst.record(better.value, || better.place);
    }

    /// The point with accelerations and wrenches of soft soles as played.
    fn played_point(&self, point: &[f64], played: &Played) -> Vec<f64> {
        let mut x = point.to_vec();
        for (&j, &a) in self.columns.acceleration.iter().zip(&played.acceleration) {
            self.columns.set(&mut x, Some(j), a);
        }
        for (columns, wrench) in self.columns.wrench.iter().zip(&played.ends) {
            let Some(wrench) = wrench.map(|w| w.to_vec6()) else { continue };
            columns.iter().zip(wrench.iter()).for_each(|(&c, &w)| self.columns.set(&mut x, c, w));
        }
        x
    }

    /// Rows of the contact groups of all soft soles.
    fn soft_rows(&self) -> Vec<usize> {
        let contacts = self.situation.question.contacts.iter();
        let soft = contacts.filter(|c| !matches!(c.ground.law, Law::Rigid { .. }));
        soft.flat_map(|c| self.group(&format!("contact:{}", self.situation.name(c)))).collect()
    }

    /// The rows are as many as the wrenches they have to fix, and independent.
    fn independent(&self, rows: &[usize], worst: &mut Worst) {
        let contacts = self.situation.question.contacts.iter().enumerate();
        let soft = contacts.filter(|(_, c)| !matches!(c.ground.law, Law::Rigid { .. })).map(|(i, _)| i);
        let wrenches: usize = soft.map(|i| self.columns.wrench[i].iter().flatten().count()).sum();
        let matrix = &self.hierarchy.hard.matrix;
        let mut block = DMatrix::zeros(rows.len(), self.columns.scale.len());
        for (k, &r) in rows.iter().enumerate() {
            let size = matrix.row(r).map(|e| e.1 * e.1).sum::<f64>().sqrt();
            matrix.row(r).for_each(|(j, v)| block[(k, j)] += v / size);
        }
        let rank = if rows.is_empty() { Some(0) } else { decompose(block).map(|svd| svd.rank(MISSING * svd.singular_values.max())) };
        if rank != Some(wrenches) || rows.len() != wrenches {
            worst.record(f64::NAN, || "rows do not fix the wrenches of the soft soles".into());
        }
    }

    fn contact(&self, i: usize, worst: &mut Worst) {
        let contact = &self.situation.question.contacts[i];
        let name = format!("contact:{}", self.situation.name(contact));
        if matches!(contact.ground.law, Law::Rigid { .. }) {
            return self.rigid(i, &name, worst);
        }
        if self.situation.is_held() {
            return;
        }
        self.implied(i, &name, worst, |x| {
            let motions = self.situation.motions(&self.columns.acceleration(x));
            let motion = self.situation.sole(contact, &motions);
            self.situation.end(i, &motion.acceleration).unwrap_or_else(Wrench::zero)
        });
    }

    fn vertices(&self, i: usize, worst: &mut Worst) {
        let contact = &self.situation.question.contacts[i];
        if !spread(self.situation, contact) {
            return;
        }
        let arms = vertex_arms(self.situation, contact);
        let name = format!("vertices:{}", self.situation.name(contact));
        if self.columns.vertices[i].len() != arms.len() {
            return worst.record(f64::NAN, || format!("{name}: columns missing"));
        }
        self.implied(i, &name, worst, |x| gathered(&arms, &self.columns.forces(x, i)));
    }

    /// The rows of a group, solved for the wrench of contact i, against what the wrench should be.
    fn implied(&self, i: usize, name: &str, worst: &mut Worst, law: impl Fn(&[f64]) -> Wrench) {
        let rows = self.group(name);
        let unknown: Vec<(usize, usize)> =
            self.columns.wrench[i].iter().enumerate().filter_map(|(k, c)| c.map(|c| (k, c))).collect();
        let matrix = &self.hierarchy.hard.matrix;
        let coefficient = |row: usize, column: usize| -> f64 {
            matrix.row(row).filter(|e| e.0 == column).map(|e| e.1).sum()
        };
        let block = DMatrix::from_fn(rows.len(), unknown.len(), |r, c| coefficient(rows[r], unknown[c].1));
        let svd = decompose(block).filter(|svd| {
            let top = svd.singular_values.max();
            rows.len() == unknown.len() && svd.rank(MISSING * top) == unknown.len()
        });
        let Some(svd) = svd else {
            return worst.record(f64::NAN, || format!("{name}: rows do not fix the wrench"));
        };
        for point in &self.points {
            let wanted = law(point).to_vec6();
            let mut x = point.clone();
            for (k, &column) in self.columns.wrench[i].iter().enumerate() {
                self.columns.set(&mut x, column, wanted[k]);
            }
            let off = DVector::from_iterator(rows.len(), rows.iter().map(|&r| self.value(r, &x)));
            let size = self.situation.weight.max(wanted.norm());
            let Ok(implied) = svd.solve(&off, 0.0) else {
                return worst.record(f64::NAN, || name.to_string());
            };
            for (value, (k, column)) in implied.iter().zip(&unknown) {
                worst.record((value * self.columns.scale[*column]).abs() / size, || format!("{name} part {k}"));
            }
        }
    }

    /// Rigid ground: the rows prescribe the sole's acceleration, all of it and nothing else.
    fn rigid(&self, i: usize, name: &str, worst: &mut Worst) {
        let contact = &self.situation.question.contacts[i];
        let rows = self.group(name);
        let parts = self.columns.wrench[i].iter().flatten().count();
        let n = self.columns.acceleration.len();
        let moved = |a: &[f64]| self.situation.sole(contact, &self.situation.motions(a));
        let flat = |t: &Twist| DVector::from_fn(parts, |k, _| t.to_vec6()[k]);
        let start = flat(&moved(&vec![0.0; n]).acceleration);
        let mut way = DMatrix::zeros(parts, n);
        for j in 0..n {
            let mut unit = vec![0.0; n];
            unit[j] = self.columns.scale[self.columns.acceleration[j]];
            way.set_column(j, &(flat(&moved(&unit).acceleration) - &start));
        }
        let Some(wanted) = self.situation.prescribed(contact, &moved(&vec![0.0; n])) else { return };
        let own = DMatrix::from_fn(rows.len(), n, |r, j| {
            let column = self.columns.acceleration[j];
            self.hierarchy.hard.matrix.row(rows[r]).filter(|e| e.0 == column).map(|e| e.1).sum::<f64>()
        });
        let (Some(ours), Some(theirs)) = (decompose(way.clone()), decompose(own)) else {
            return worst.record(f64::NAN, || format!("{name}: rows missing"));
        };
        let cut = |svd: &Decomposed| LOST * svd.singular_values.max();
        if ours.rank(cut(&ours)) != theirs.rank(cut(&theirs)) {
            return worst.record(f64::NAN, || format!("{name}: rows do not fix the sole's acceleration"));
        }
        for point in &self.points {
            let present = self.columns.acceleration.iter().map(|&j| point[j]);
            let is = &start + &way * DVector::from_iterator(n, present);
            let Ok(step) = ours.solve(&(flat(&wanted) - &is), cut(&ours)) else {
                return worst.record(f64::NAN, || name.to_string());
            };
            let mut x = point.clone();
            for (k, &j) in self.columns.acceleration.iter().enumerate() {
                x[j] += step[k];
            }
            let reached = &is + &way * &step;
            if (&reached - flat(&wanted)).norm() > UNREACHED * is.norm().max(self.situation.gravity) {
                return;
            }
            for &r in &rows {
                let size = row_size(&self.hierarchy.hard.matrix, &self.hierarchy.hard.rhs, r, &x).max(1.0);
                worst.record(self.value(r, &x).abs() / size, || format!("{name} {}", self.hierarchy.hard.names[r].part));
            }
        }
    }
}
