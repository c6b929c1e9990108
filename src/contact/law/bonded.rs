//! The bonded law: springs and dampers over the whole polygon, tension included.
//!
//! At sole point r: `p(r) = o + R r`, rest position `p0(r) = o0 + R0 r`, ground velocity
//! `p0_dot(r) = v0 + w0 x (R0 r)`, and the traction per unit area is
//! ```text
//! rho(r) = K (p0 - p) - B (p_dot - p0_dot),   K = k_t (I - n n') + k_n n n',  B likewise.
//! ```
//! It is affine in r: `rho = rho0 + P R r` with d = o0 - o, E = R0 - R = F R and
//! ```text
//! rho0 = K d - B (v - v0),     P = K F - B ([w - w0]x - [w0]x F).
//! ```
//! With A, S1 = int r dA, S2 = int r r' dA and, in world axes, s = R S1, Q = R S2 R', the wrench is
//! ```text
//! f = A rho0 + P s,     m = s x rho0 + X[Q P'],    X[Q] = (Q23 - Q32, Q31 - Q13, Q12 - Q21).
//! ```

use crate::contact::moments::{SoleMoments, cross_sum, material_matrices};
use crate::contact::relative::Relative;
use crate::contact::{Material, SoleMotion};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Mat6, Pose, Twist, Vec3, Wrench, skew};

/// Wrench of the ground on the sole (N, N m; world axes, about the sole-frame origin).
///
/// `normal` is the unit ground normal, `rest_pose` the unloaded sole pose and `rest_twist` its
/// velocity (of its own origin), `motion` the present sole pose and velocity, all in world axes.
/// `material` is per area under a polygon, per sole under a point.
pub fn bonded_wrench(
    shape: &SoleShape,
    material: &Material,
    normal: &Vec3,
    rest_pose: &Pose,
    rest_twist: &Twist,
    motion: &SoleMotion,
) -> Wrench {
    let state = Relative::between(normal, rest_pose, rest_twist, motion);
    wrench(&SoleMoments::of(shape), material, &state)
}

/// `S = -dw/d(pose)` and `D = -dw/d(twist)` of [`bonded_wrench`] at the given state.
///
/// A pose moves by (translation of the sole origin, left rotation vector), a twist by (linear,
/// angular), all in world axes; the wrench stays about the moving origin. S holds the change of
/// lever arms under the present load and the turning of damped points: it is not symmetric in general.
pub fn stiffness_and_damping(
    shape: &SoleShape,
    material: &Material,
    normal: &Vec3,
    rest_pose: &Pose,
    rest_twist: &Twist,
    motion: &SoleMotion,
) -> (Mat6, Mat6) {
    let state = Relative::between(normal, rest_pose, rest_twist, motion);
    derivatives(&SoleMoments::of(shape), material, &state)
}

/// `rho0` and `P` of the affine traction field (see the top of this file).
fn traction(stiffness: &Mat3, damping: &Mat3, state: &Relative) -> (Vec3, Mat3) {
    let (twist, ground) = (&state.twist, &state.rest_twist);
    let constant = stiffness * state.offset - damping * (twist.linear - ground.linear);
    let slope = stiffness * state.turn
        - damping * (skew(&(twist.angular - ground.angular)) - skew(&ground.angular) * state.turn);
    (constant, slope)
}

/// The law on a state kept as differences.
pub(in crate::contact) fn wrench(sole: &SoleMoments, material: &Material, state: &Relative) -> Wrench {
    let (k, b) = material_matrices(material, &state.normal);
    let (rho0, p) = traction(&k, &b, state);
    let s = state.rotation * sole.first;
    let q = state.rotation * sole.second * state.rotation.transpose();
    Wrench {
        force: rho0 * sole.area + p * s,
        moment: s.cross(&rho0) + cross_sum(&(q * p.transpose())),
    }
}

/// S and D on a state kept as differences.
///
/// Under a translation u and a left rotation phi the traction at y = R r changes by
/// `-K u - (K + B [w]x)(phi x y)` and the arm by `phi x y`; under a change (u, phi) of the twist the
/// traction changes by `-B (u + phi x y)`. Summed over the sole, with `M = K + B [w]x` and `U = int y rho'`:
/// ```text
/// S = [ A K      -M [s]x                                                  ]
///     [ [s]x K   -([rho0]x [s]x + U1 - tr(U1) I + int [y]x M [y]x dA)     ],   U1 = Q P'
/// D = [ A B  -B [s]x ;  [s]x B  -int [y]x B [y]x dA ].
/// ```
pub(in crate::contact) fn derivatives(
    sole: &SoleMoments,
    material: &Material,
    state: &Relative,
) -> (Mat6, Mat6) {
    let (k, b) = material_matrices(material, &state.normal);
    let (rho0, p) = traction(&k, &b, state);
    let s = state.rotation * sole.first;
    let q = state.rotation * sole.second * state.rotation.transpose();
    let (arm, m) = (skew(&s), k + b * skew(&state.twist.angular));
    let u1 = q * p.transpose();

    let turning_arms = skew(&rho0) * arm + u1 - Mat3::identity() * u1.trace();
    let stiffness = blocks(
        &(k * sole.area),
        &(-m * arm),
        &(arm * k),
        &(rotational_bed(&q, &m) - turning_arms),
    );
    let damping = blocks(
        &(b * sole.area),
        &(-b * arm),
        &(arm * b),
        &rotational_bed(&q, &b),
    );
    (stiffness, damping)
}

/// `-int [y]x M [y]x dA`, given `Q = int y y' dA`: column k is `int y x M (e_k x y) dA = X[Q [e_k]x' M']`.
pub(in crate::contact) fn rotational_bed(q: &Mat3, m: &Mat3) -> Mat3 {
    let column = |axis: Vec3| cross_sum(&(q * (m * skew(&axis)).transpose()));
    Mat3::from_columns(&[column(Vec3::x()), column(Vec3::y()), column(Vec3::z())])
}

/// A 6 x 6 matrix from its four blocks, row by row.
pub(in crate::contact) fn blocks(ff: &Mat3, fm: &Mat3, mf: &Mat3, mm: &Mat3) -> Mat6 {
    let mut out = Mat6::zeros();
    out.fixed_view_mut::<3, 3>(0, 0).copy_from(ff);
    out.fixed_view_mut::<3, 3>(0, 3).copy_from(fm);
    out.fixed_view_mut::<3, 3>(3, 0).copy_from(mf);
    out.fixed_view_mut::<3, 3>(3, 3).copy_from(mm);
    out
}
