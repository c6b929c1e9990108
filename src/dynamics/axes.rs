//! Base velocities in world or base axes: conversion in and out.
//!
//! Inside, both parts of the base velocity are in world axes. A user may give either part in base
//! axes: `nu = X nu_user` with X the identity but for the base rotation R on the parts in base
//! axes. Then
//!
//! ```text
//! nu_dot          = X nu_dot_user + X_dot nu_user
//! M_user          = X' M X
//! h_user          = X' (h + M X_dot nu_user)
//! f_user          = X' f
//! J_user          = J X
//! (J_dot nu)_user = J_dot nu + J X_dot nu_user
//! ```
//!
//! and X_dot nu_user is `omega x v_B` for the linear part in base axes; the angular part gives
//! `omega x omega = 0`.

use nalgebra::{DMatrix, DVector};

use crate::model::{BaseKind, Model, State};
use crate::spatial::{Mat3, Twist, Vec3, Vec6, stack};

/// The axes a vector is written in.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Axes {
    /// World axes.
    #[default]
    World,
    /// Axes of the base link.
    Base,
}

/// The axes of the two parts of a base velocity. World for both unless told otherwise.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct VelocityAxes {
    /// Of the velocity of the base origin.
    pub linear: Axes,
    /// Of the angular velocity.
    pub angular: Axes,
}

/// X and `X_dot nu_user` at one state.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AxesMap {
    floating: bool,
    linear: Mat3,
    angular: Mat3,
    /// X_dot nu_user: zero but for the first three.
    drift: Vec3,
}

impl VelocityAxes {
    /// A base velocity in these axes, brought to world axes; `rotation` is the base's.
    pub fn twist_to_world(&self, rotation: &Mat3, twist: &Twist) -> Twist {
        Twist {
            linear: matrix(self.linear, rotation) * twist.linear,
            angular: matrix(self.angular, rotation) * twist.angular,
        }
    }

    /// A base velocity in world axes, brought to these axes.
    pub fn twist_from_world(&self, rotation: &Mat3, twist: &Twist) -> Twist {
        Twist {
            linear: matrix(self.linear, rotation).tr_mul(&twist.linear),
            angular: matrix(self.angular, rotation).tr_mul(&twist.angular),
        }
    }

    /// The map at `state`, whose base twist is in world axes as always.
    pub fn map(&self, model: &Model, state: &State) -> AxesMap {
        let rotation = &state.base_pose.rotation;
        let Twist { linear: v, angular: w } = state.base_twist;
        AxesMap {
            floating: model.base == BaseKind::Floating,
            linear: matrix(self.linear, rotation),
            angular: matrix(self.angular, rotation),
            drift: if self.linear == Axes::Base { w.cross(&v) } else { Vec3::zeros() },
        }
    }
}

fn matrix(axes: Axes, rotation: &Mat3) -> Mat3 {
    match axes {
        Axes::World => Mat3::identity(),
        Axes::Base => *rotation,
    }
}

impl AxesMap {
    /// `X_dot nu_user` of the base part (m/s^2, rad/s^2).
    pub fn drift(&self) -> Vec6 {
        stack(&self.drift, &Vec3::zeros())
    }

    /// `nu_dot` in world axes from `nu_dot_user`, in place (nv).
    pub fn acceleration_to_world(&self, nu_dot: &mut [f64]) {
        if self.floating {
            let (linear, angular) = base_parts(nu_dot);
            write_base(nu_dot, &(self.linear * linear + self.drift), &(self.angular * angular));
        }
    }

    /// `nu_dot_user` from `nu_dot` in world axes, in place (nv).
    pub fn acceleration_from_world(&self, nu_dot: &mut [f64]) {
        if self.floating {
            let (linear, angular) = base_parts(nu_dot);
            let linear = self.linear.tr_mul(&(linear - self.drift));
            write_base(nu_dot, &linear, &self.angular.tr_mul(&angular));
        }
    }

    /// `X' f` of a generalised force, in place (nv).
    pub fn force_from_world(&self, force: &mut [f64]) {
        if self.floating {
            let (linear, angular) = base_parts(force);
            write_base(force, &self.linear.tr_mul(&linear), &self.angular.tr_mul(&angular));
        }
    }

    /// World generalised force from the user's, `X f_user`, in place (nv).
    pub fn force_to_world(&self, force: &mut [f64]) {
        if self.floating {
            let (linear, angular) = base_parts(force);
            write_base(force, &(self.linear * linear), &(self.angular * angular));
        }
    }

    /// `X' (h + M X_dot nu_user)` in place; `mass_matrix` is still the one in world axes.
    pub fn bias_from_world(&self, mass_matrix: &DMatrix<f64>, bias: &mut DVector<f64>) {
        if self.floating {
            for k in 0..3 {
                bias.axpy(self.drift[k], &mass_matrix.column(k), 1.0);
            }
            self.force_from_world(bias.as_mut_slice());
        }
    }

    /// `X' M X` in place.
    pub fn mass_matrix_from_world(&self, mass_matrix: &mut DMatrix<f64>) {
        self.jacobian_from_world(mass_matrix);
        if self.floating {
            for mut column in mass_matrix.column_iter_mut() {
                let (linear, angular) = (column.fixed_rows::<3>(0).into_owned(), column.fixed_rows::<3>(3).into_owned());
                column.fixed_rows_mut::<3>(0).copy_from(&self.linear.tr_mul(&linear));
                column.fixed_rows_mut::<3>(3).copy_from(&self.angular.tr_mul(&angular));
            }
        }
    }

    /// `J X` in place, for a Jacobian or momentum matrix of any number of rows (rows x nv).
    pub fn jacobian_from_world(&self, jacobian: &mut DMatrix<f64>) {
        if self.floating {
            for mut row in jacobian.row_iter_mut() {
                let linear = row.fixed_columns::<3>(0) * self.linear;
                let angular = row.fixed_columns::<3>(3) * self.angular;
                row.fixed_columns_mut::<3>(0).copy_from(&linear);
                row.fixed_columns_mut::<3>(3).copy_from(&angular);
            }
        }
    }

    /// `J_dot nu + J X_dot nu_user`; `jacobian` (6 x nv) is still the one in world axes. Serves the
    /// momentum bias in the same way.
    pub fn rate_from_world(&self, jacobian: &DMatrix<f64>, rate: &Vec6) -> Vec6 {
        let mut out = *rate;
        if self.floating {
            for k in 0..3 {
                out += jacobian.fixed_view::<6, 1>(0, k) * self.drift[k];
            }
        }
        out
    }
}

fn base_parts(v: &[f64]) -> (Vec3, Vec3) {
    (Vec3::new(v[0], v[1], v[2]), Vec3::new(v[3], v[4], v[5]))
}

fn write_base(v: &mut [f64], linear: &Vec3, angular: &Vec3) {
    v[..3].copy_from_slice(linear.as_slice());
    v[3..6].copy_from_slice(angular.as_slice());
}
