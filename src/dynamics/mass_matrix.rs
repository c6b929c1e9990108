//! Mass matrix and centroidal momentum by composite rigid bodies.
//!
//! Freeze everything outwards of joint i into one rigid body with mass m, centre c and inertia I
//! about c. A unit speed of that joint alone gives it the linear momentum P and, about c, the
//! angular momentum L:
//!
//! ```text
//! turning:  P = m a_i x (c - p_i),  L = I a_i        sliding:  P = m a_i,  L = 0
//! ```
//!
//! Only joints between i and the base feel it (all others give zero), and what joint j feels is
//!
//! ```text
//! turning:  M_ij = a_j . (L + (c - p_j) x P)         sliding:  M_ij = a_j . P
//! ```
//!
//! Taking the moments about c, not about a common origin, keeps the small inertias of far-out
//! links from drowning in `m |distance|^2`. The same P and L, with L moved to the centre of mass of
//! the robot, are column i of the centroidal momentum matrix.

use nalgebra::DMatrix;

use super::workspace::{BodyState, Workspace};
use crate::model::Model;
use crate::spatial::{Vec3, parallel_axis, skew, stack};

impl Workspace {
    /// Mass, centre and inertia of every subtree, from the tips inwards.
    pub(super) fn update_composites(&mut self) {
        for body in &mut self.bodies {
            body.composite_mass = body.mass;
            body.composite_center = body.center;
            body.composite_inertia = body.inertia;
        }
        for i in (1..self.bodies.len()).rev() {
            let (inner, outer) = self.bodies.split_at_mut(i);
            add_composite(&mut inner[self.links[i].parent], &outer[0]);
        }
        let root = &self.bodies[0];
        self.mass = root.composite_mass;
        self.center_of_mass = root.composite_center;
        self.centroidal_inertia = root.composite_inertia;
    }

    /// Fills the mass matrix and the columns of the momentum matrix. Entries that the tree makes
    /// zero are never written.
    pub(super) fn update_mass_matrix(&mut self, model: &Model) {
        if self.floating {
            self.fill_base_blocks();
        }
        for i in 1..self.bodies.len() {
            let Some(motion) = self.links[i].motion else { continue };
            let body = &self.bodies[i];
            let c = body.composite_center;
            let (p, l) = joint_momentum(body, motion.slides);
            let column = motion.column;
            let mut j = i;
            // Parents have smaller indices, so the walk ends at the base.
            while j != 0 {
                if let Some(ancestor) = self.links[j].motion {
                    let at = &self.bodies[j];
                    let entry = if ancestor.slides {
                        at.axis.dot(&p)
                    } else {
                        at.axis.dot(&(l + (c - at.pose.translation).cross(&p)))
                    };
                    self.mass_matrix[(column, ancestor.column)] = entry;
                    self.mass_matrix[(ancestor.column, column)] = entry;
                }
                j = self.links[j].parent;
            }
            self.mass_matrix[(column, column)] += model.joints[motion.joint].rotor_inertia;
            if self.floating {
                let about_base = l + (c - self.bodies[0].pose.translation).cross(&p);
                write_base_column(&mut self.mass_matrix, column, &p, &about_base);
            }
            let about_center = l + (c - self.center_of_mass).cross(&p);
            let entries = stack(&p, &about_center);
            self.momentum_matrix.column_mut(column).copy_from(&entries);
        }
    }

    /// The base moves the whole robot as one body: with r from the base origin to the centre,
    /// `[[m, -m [r]x], [m [r]x, I + m (r.r - r r')]]`.
    fn fill_base_blocks(&mut self) {
        let arm = self.center_of_mass - self.bodies[0].pose.translation;
        let shift = skew(&(arm * self.mass));
        let about_base = self.centroidal_inertia + parallel_axis(self.mass, &arm);
        for r in 0..3 {
            self.mass_matrix[(r, r)] = self.mass;
            self.momentum_matrix[(r, r)] = self.mass;
            for c in 0..3 {
                self.mass_matrix[(r, 3 + c)] = -shift[(r, c)];
                self.mass_matrix[(3 + r, c)] = shift[(r, c)];
                self.mass_matrix[(3 + r, 3 + c)] = about_base[(r, c)];
                self.momentum_matrix[(r, 3 + c)] = -shift[(r, c)];
                self.momentum_matrix[(3 + r, 3 + c)] = self.centroidal_inertia[(r, c)];
            }
        }
    }

    /// Momentum summed over the bodies (not through A_G, so that the two can be compared).
    pub(super) fn update_momentum(&mut self) {
        let center = self.center_of_mass;
        let (mut linear, mut angular) = (Vec3::zeros(), Vec3::zeros());
        for b in &self.bodies {
            let w = b.twist.angular;
            let p = b.mass * (b.twist.linear + w.cross(&(b.center - b.pose.translation)));
            linear += p;
            angular += b.inertia * w + (b.center - center).cross(&p);
        }
        self.momentum = stack(&linear, &angular);
        self.center_of_mass_velocity =
            if self.mass > 0.0 { linear / self.mass } else { self.bodies[0].twist.linear };
    }
}

/// Welds `outer`'s composite body to `inner`'s: with reduced mass m1 m2 / (m1 + m2) on their
/// distance, the parallel-axis terms of both in one.
fn add_composite(inner: &mut BodyState, outer: &BodyState) {
    let mass = inner.composite_mass + outer.composite_mass;
    inner.composite_inertia += outer.composite_inertia;
    if mass > 0.0 {
        let share = outer.composite_mass / mass;
        let distance = outer.composite_center - inner.composite_center;
        inner.composite_inertia += parallel_axis(inner.composite_mass * share, &distance);
        inner.composite_center += distance * share;
    }
    inner.composite_mass = mass;
}

/// Linear momentum, and angular momentum about the composite centre, per unit joint speed.
fn joint_momentum(body: &BodyState, slides: bool) -> (Vec3, Vec3) {
    if slides {
        (body.axis * body.composite_mass, Vec3::zeros())
    } else {
        let arm = body.composite_center - body.pose.translation;
        (body.axis.cross(&arm) * body.composite_mass, body.composite_inertia * body.axis)
    }
}

fn write_base_column(m: &mut DMatrix<f64>, column: usize, force: &Vec3, moment: &Vec3) {
    for r in 0..3 {
        m[(r, column)] = force[r];
        m[(column, r)] = force[r];
        m[(3 + r, column)] = moment[r];
        m[(column, 3 + r)] = moment[r];
    }
}
