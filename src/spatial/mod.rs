//! Rotations, twists, wrenches and inertias: the small fixed-size vocabulary of the physics.
//!
//! Axes are world axes and units SI unless a name says otherwise. Where six numbers stand
//! together, the linear part comes first.

pub mod polygon;

use nalgebra::{Matrix3, Matrix6, SVector, Vector3};

/// A vector in three dimensions.
pub type Vec3 = Vector3<f64>;
/// A 3 x 3 matrix.
pub type Mat3 = Matrix3<f64>;
/// Six numbers, linear part first.
pub type Vec6 = SVector<f64, 6>;
/// A 6 x 6 matrix acting on [`Vec6`].
pub type Mat6 = Matrix6<f64>;

/// A rigid placement: `p_outer = rotation * p_inner + translation`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pose {
    /// Rotation from inner to outer axes, orthonormal.
    pub rotation: Mat3,
    /// Position of the inner origin in outer axes (m).
    pub translation: Vec3,
}

/// Velocity of a rigid body: linear velocity of the named origin (m/s), angular velocity (rad/s).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Twist {
    /// Linear velocity of the origin (m/s).
    pub linear: Vec3,
    /// Angular velocity (rad/s).
    pub angular: Vec3,
}

/// Force (N) and moment (N m) about the named origin.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Wrench {
    /// Force (N).
    pub force: Vec3,
    /// Moment about the origin (N m).
    pub moment: Vec3,
}

/// Mass properties of a rigid body in its own axes.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Inertia {
    /// Mass (kg).
    pub mass: f64,
    /// Centre of mass in body axes (m).
    pub center: Vec3,
    /// Rotational inertia about the centre of mass, body axes (kg m^2).
    pub about_center: Mat3,
}

impl Pose {
    /// The placement that changes nothing.
    pub fn identity() -> Self {
        Pose { rotation: Mat3::identity(), translation: Vec3::zeros() }
    }

    /// `self` after `inner`: maps inner's inner axes to self's outer axes.
    pub fn compose(&self, inner: &Pose) -> Pose {
        Pose {
            rotation: self.rotation * inner.rotation,
            translation: self.rotation * inner.translation + self.translation,
        }
    }

    /// The placement of the outer axes in the inner ones.
    pub fn inverse(&self) -> Pose {
        let rotation = self.rotation.transpose();
        Pose { rotation, translation: -(rotation * self.translation) }
    }

    /// Outer coordinates of an inner point.
    pub fn point(&self, inner: &Vec3) -> Vec3 {
        self.rotation * inner + self.translation
    }
}

impl Twist {
    /// No motion.
    pub fn zero() -> Self {
        Twist { linear: Vec3::zeros(), angular: Vec3::zeros() }
    }

    /// Linear part first.
    pub fn to_vec6(&self) -> Vec6 {
        stack(&self.linear, &self.angular)
    }

    /// From six numbers, linear part first.
    pub fn from_vec6(v: &Vec6) -> Self {
        Twist { linear: head(v), angular: tail(v) }
    }
}

impl Wrench {
    /// No load.
    pub fn zero() -> Self {
        Wrench { force: Vec3::zeros(), moment: Vec3::zeros() }
    }

    /// Force first.
    pub fn to_vec6(&self) -> Vec6 {
        stack(&self.force, &self.moment)
    }

    /// From six numbers, force first.
    pub fn from_vec6(v: &Vec6) -> Self {
        Wrench { force: head(v), moment: tail(v) }
    }

    /// `(1 - share) self + share other`.
    pub fn mixed(&self, other: &Wrench, share: f64) -> Wrench {
        Wrench {
            force: self.force * (1.0 - share) + other.force * share,
            moment: self.moment * (1.0 - share) + other.moment * share,
        }
    }

    /// The same load in other axes: each part multiplied by `rotation`.
    pub fn rotated(&self, rotation: &Mat3) -> Wrench {
        Wrench { force: rotation * self.force, moment: rotation * self.moment }
    }
}

impl Inertia {
    /// A body that weighs nothing.
    pub fn zero() -> Self {
        Inertia { mass: 0.0, center: Vec3::zeros(), about_center: Mat3::zeros() }
    }

    /// The same body described in the outer axes of `placement`.
    pub fn placed(&self, placement: &Pose) -> Inertia {
        Inertia {
            mass: self.mass,
            center: placement.point(&self.center),
            about_center: placement.rotation * self.about_center * placement.rotation.transpose(),
        }
    }

    /// Two bodies welded together (parallel-axis theorem), both in the same axes.
    pub fn combined(&self, other: &Inertia) -> Inertia {
        let mass = self.mass + other.mass;
        if mass <= 0.0 {
            return Inertia {
                mass: 0.0,
                center: Vec3::zeros(),
                about_center: self.about_center + other.about_center,
            };
        }
        let center = (self.center * self.mass + other.center * other.mass) / mass;
        let shifted = |part: &Inertia| {
            let arm = part.center - center;
            part.about_center + parallel_axis(part.mass, &arm)
        };
        Inertia { mass, center, about_center: shifted(self) + shifted(other) }
    }
}

/// `m (|r|^2 I - r r')`: what moving the reference point by `arm` adds to a rotational inertia.
pub fn parallel_axis(mass: f64, arm: &Vec3) -> Mat3 {
    mass * (Mat3::identity() * arm.norm_squared() - arm * arm.transpose())
}

/// Linear and angular parts as six numbers.
pub fn stack(linear: &Vec3, angular: &Vec3) -> Vec6 {
    Vec6::new(linear.x, linear.y, linear.z, angular.x, angular.y, angular.z)
}

/// The first three of six numbers.
pub fn head(v: &Vec6) -> Vec3 {
    Vec3::new(v[0], v[1], v[2])
}

/// The last three of six numbers.
pub fn tail(v: &Vec6) -> Vec3 {
    Vec3::new(v[3], v[4], v[5])
}

/// The matrix of the cross product: `skew(a) * b = a x b`.
pub fn skew(a: &Vec3) -> Mat3 {
    Mat3::new(0.0, -a.z, a.y, a.z, 0.0, -a.x, -a.y, a.x, 0.0)
}

/// Rotation by the vector `phi` (axis times angle, rad): the exponential map of SO(3) (Rodrigues).
pub fn exp_so3(phi: &Vec3) -> Mat3 {
    let angle = phi.norm();
    let (a, b) = if angle < 1e-4 {
        let t = angle * angle;
        (1.0 - t / 6.0 + t * t / 120.0, 0.5 - t / 24.0 + t * t / 720.0)
    } else {
        (angle.sin() / angle, (1.0 - angle.cos()) / (angle * angle))
    };
    let k = skew(phi);
    Mat3::identity() + k * a + k * k * b
}

/// The rotation vector of `rotation` (rad, norm at most pi): the logarithm of SO(3).
pub fn log_so3(rotation: &Mat3) -> Vec3 {
    let q = quaternion_of(rotation);
    let (x, w) = (Vec3::new(q[0], q[1], q[2]), q[3]);
    let (x, w) = if w < 0.0 { (-x, -w) } else { (x, w) };
    let n = x.norm();
    if n < 1e-9 { x * (2.0 / w) } else { x * (2.0 * n.atan2(w) / n) }
}

/// The left Jacobian of SO(3) at `phi`: `exp(phi + d) = exp(J d) exp(phi)` to first order.
pub fn left_jacobian_so3(phi: &Vec3) -> Mat3 {
    let angle = phi.norm();
    let (b, c) = if angle < 1e-4 {
        let t = angle * angle;
        (0.5 - t / 24.0, 1.0 / 6.0 - t / 120.0)
    } else {
        let t = angle * angle;
        ((1.0 - angle.cos()) / t, (angle - angle.sin()) / (t * angle))
    };
    let k = skew(phi);
    Mat3::identity() + k * b + k * k * c
}

/// Rotation of fixed-axis roll, pitch, yaw (rad): `Rz(yaw) Ry(pitch) Rx(roll)`, as URDF has it.
pub fn rotation_from_rpy(roll: f64, pitch: f64, yaw: f64) -> Mat3 {
    let (sr, cr) = roll.sin_cos();
    let (sp, cp) = pitch.sin_cos();
    let (sy, cy) = yaw.sin_cos();
    Mat3::new(
        cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr,
        sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr,
        -sp, cp * sr, cp * cr,
    )
}

/// Rotation of a unit quaternion `[x, y, z, w]`.
pub fn rotation_from_quaternion(q: &[f64; 4]) -> Mat3 {
    let [x, y, z, w] = *q;
    Mat3::new(
        1.0 - 2.0 * (y * y + z * z), 2.0 * (x * y - z * w), 2.0 * (x * z + y * w),
        2.0 * (x * y + z * w), 1.0 - 2.0 * (x * x + z * z), 2.0 * (y * z - x * w),
        2.0 * (x * z - y * w), 2.0 * (y * z + x * w), 1.0 - 2.0 * (x * x + y * y),
    )
}

/// Unit quaternion `[x, y, z, w]` of a rotation (Shepperd's method: the largest component first).
pub fn quaternion_of(r: &Mat3) -> [f64; 4] {
    let trace = r.trace();
    let candidates = [r[(0, 0)], r[(1, 1)], r[(2, 2)], trace];
    let mut largest = 3;
    for i in 0..3 {
        if candidates[i] > candidates[largest] {
            largest = i;
        }
    }
    let mut q = if largest == 3 {
        [r[(2, 1)] - r[(1, 2)], r[(0, 2)] - r[(2, 0)], r[(1, 0)] - r[(0, 1)], 1.0 + trace]
    } else {
        let (i, j, k) = (largest, (largest + 1) % 3, (largest + 2) % 3);
        let mut q = [0.0; 4];
        q[i] = 1.0 - trace + 2.0 * r[(i, i)];
        q[j] = r[(j, i)] + r[(i, j)];
        q[k] = r[(k, i)] + r[(i, k)];
        q[3] = r[(k, j)] - r[(j, k)];
        q
    };
    let norm = q.iter().map(|c| c * c).sum::<f64>().sqrt();
    q.iter_mut().for_each(|c| *c /= norm);
    q
}

/// Rotation whose third column is the unit vector `normal` (its other axes are arbitrary but fixed).
pub fn rotation_with_z(normal: &Vec3) -> Mat3 {
    let helper = if normal.x.abs() < 0.9 { Vec3::x() } else { Vec3::y() };
    let x = (helper - normal * normal.dot(&helper)).normalize();
    let y = normal.cross(&x);
    Mat3::from_columns(&[x, y, *normal])
}

/// The 6 x 6 matrix that carries a wrench about a point to the point that lies `arm` away from
/// it towards the old point: `moment_new = moment + arm x force`, `arm = old - new`.
pub fn shift_wrench(arm: &Vec3) -> Mat6 {
    let mut x = Mat6::identity();
    x.fixed_view_mut::<3, 3>(3, 0).copy_from(&skew(arm));
    x
}
