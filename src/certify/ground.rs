//! The ground law by quadrature: the traction of the definition, summed over points of the sole.
//!
//! At sole point r: `rho = K (p0 - p) - B (p_dot - p0_dot)`, K and B split along the ground normal.
//! The wrench about the sole origin is `int rho dA`, `int (p - o) x rho dA`. Over a flat polygon the
//! integrands are quadratic in r, so the rule below is exact up to rounding; no area moment, no
//! closed form and no stiffness matrix appears. A point foot is one node of weight one.

use crate::contact::{Law, Material, Patch, SoleMotion, TickRule};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Twist, Vec3, Wrench, exp_so3, left_jacobian_so3, log_so3, skew};

/// `(c, theta)` of a tick rule (`held` has none and is checked in `held.rs`): pose advance `T v + c T^2 a`, `w_bar = (1 - theta) now + theta w+`.
pub fn rule_factors(rule: TickRule) -> (f64, f64) {
    match rule {
        TickRule::BackwardEuler => (1.0, 1.0),
        TickRule::Trapezoid | TickRule::Held => (0.5, 0.5),
        TickRule::Explicit => (0.0, 0.0),
    }
}

/// One quadrature node: a sole point (m, sole axes) and the area it stands for (m^2; 1 for a point foot).
#[derive(Debug, Clone, Copy)]
pub struct Node {
    /// Where.
    pub point: Vec3,
    /// Weight.
    pub weight: f64,
}

/// Quadrature nodes of a sole: the polygon as a fan of triangles, on each the product of two
/// three-point Gauss rules on the collapsed square, exact to degree four.
pub fn nodes(shape: &SoleShape) -> Vec<Node> {
    let polygon = match shape {
        SoleShape::Point => return vec![Node { point: Vec3::zeros(), weight: 1.0 }],
        SoleShape::Polygon(polygon) => polygon.vertices(),
    };
    let half = 0.6_f64.sqrt() / 2.0;
    let rule = [(0.5 - half, 5.0 / 18.0), (0.5, 8.0 / 18.0), (0.5 + half, 5.0 / 18.0)];
    let corner = |v: &[f64; 2]| Vec3::new(v[0], v[1], 0.0);
    let mut nodes = Vec::new();
    for pair in polygon.windows(2).skip(1) {
        let (a, b, c) = (corner(&polygon[0]), corner(&pair[0]), corner(&pair[1]));
        let double_area = (b - a).cross(&(c - a)).z;
        for (u, wu) in rule {
            for (v, wv) in rule {
                let point = a + ((b - a) * (1.0 - v) + (c - a) * v) * u;
                nodes.push(Node { point, weight: wu * wv * u * double_area });
            }
        }
    }
    nodes
}

/// Where the rest frame is, seen from the sole: kept as differences, because on stiff ground the rounding of
/// world coordinates alone would be newtons.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RestOffset {
    /// `o0 - o` (m, world axes).
    pub offset: Vec3,
    /// `R0 R' - I`.
    pub turn: Mat3,
}

/// A bonded sole ready for evaluation: nodes, material, normal, present motion, and where the ground rests.
#[derive(Debug, Clone)]
pub struct Bed {
    pub(super) nodes: Vec<Node>,
    material: Material,
    normal: Vec3,
    motion: SoleMotion,
    rest: RestOffset,
    rest_twist: Twist,
    measured: Option<Wrench>,
}

/// Sole and rest frame at one instant.
#[derive(Debug, Clone, Copy)]
struct Instant {
    normal: Vec3,
    rotation: Mat3,
    offset: Vec3,
    /// `R0 - R`.
    difference: Mat3,
    twist: Twist,
}

/// `exp([phi]x) - I` without losing the digits of a small turn.
pub(super) fn turn_of(phi: &Vec3) -> Mat3 {
    let angle = phi.norm();
    let (a, b) = if angle < 1e-4 {
        (1.0 - angle * angle / 6.0, 0.5 - angle * angle / 24.0)
    } else {
        (angle.sin() / angle, 2.0 * ((angle / 2.0).sin() / angle).powi(2))
    };
    let k = skew(phi);
    k * a + k * k * b
}

impl Bed {
    /// The bed under a sole that moves as `motion` says, resting where `rest` says; none where the ground is rigid.
    pub fn new(patch: &Patch, motion: &SoleMotion, rest: RestOffset) -> Option<Bed> {
        let Law::Bonded(material) = patch.ground.law else { return None };
        Some(Bed {
            nodes: nodes(patch.shape),
            material,
            normal: patch.ground.normal,
            motion: *motion,
            rest,
            rest_twist: patch.ground.rest_twist,
            measured: patch.ground.measured,
        })
    }

    /// The state `time` after the start with the sole turned by `turning`, moved by `moving`, its velocity
    /// changed by `kick`. The ground, its normal included, moves on with its own twist.
    fn instant(&self, time: f64, moving: &Vec3, turning: &Vec3, kick: &Twist) -> Instant {
        let ground = turn_of(&(self.rest_twist.angular * time));
        // R0' - R' = [(I + ground)(I + rest turn) - (I + sole turn)] R
        let difference = ground + self.rest.turn + ground * self.rest.turn - turn_of(turning);
        let (twist, rotation) = (&self.motion.twist, &self.motion.pose.rotation);
        Instant {
            normal: self.normal + ground * self.normal,
            rotation: exp_so3(turning) * rotation,
            offset: self.rest.offset + self.rest_twist.linear * time - moving,
            difference: difference * rotation,
            twist: Twist { linear: twist.linear + kick.linear, angular: twist.angular + kick.angular },
        }
    }

    /// The state at the start of the tick.
    fn present(&self) -> Instant {
        self.instant(0.0, &Vec3::zeros(), &Vec3::zeros(), &Twist::zero())
    }

    /// The state at the tick's end under acceleration `a`: the pose advances by `T v + c T^2 a` and
    /// `exp(T w + c T^2 alpha)`, the velocity by `T a`.
    fn advanced(&self, tick: (f64, TickRule), a: &Twist) -> Instant {
        let (time, reach) = (tick.0, rule_factors(tick.1).0 * tick.0 * tick.0);
        let twist = &self.motion.twist;
        let kick = Twist { linear: a.linear * time, angular: a.angular * time };
        self.instant(
            time,
            &(twist.linear * time + a.linear * reach),
            &(twist.angular * time + a.angular * reach),
            &kick,
        )
    }

    /// K times `v`.
    fn stiffen(&self, normal: &Vec3, v: &Vec3) -> Vec3 {
        split(normal, self.material.normal_stiffness, self.material.tangential_stiffness, v)
    }

    /// B times `v`.
    fn damp(&self, normal: &Vec3, v: &Vec3) -> Vec3 {
        split(normal, self.material.normal_damping, self.material.tangential_damping, v)
    }

    /// Traction at one sole point: `K (d + (R0 - R) r) - B (v + w x R r - v0 - w0 x R0 r)`.
    fn traction(&self, at: &Instant, point: &Vec3) -> Vec3 {
        let arm = at.rotation * point;
        let apart = at.difference * point;
        let ground = self.rest_twist.linear + self.rest_twist.angular.cross(&(arm + apart));
        let speed = at.twist.linear + at.twist.angular.cross(&arm) - ground;
        self.stiffen(&at.normal, &(at.offset + apart)) - self.damp(&at.normal, &speed)
    }

    fn law(&self, at: &Instant) -> Wrench {
        let mut total = Wrench::zero();
        for node in &self.nodes {
            let traction = self.traction(at, &node.point) * node.weight;
            total.force += traction;
            total.moment += (at.rotation * node.point).cross(&traction);
        }
        total
    }

    /// Change of the law to first order when the sole's origin moves by `step.linear`, its frame
    /// turns by `step.angular` (world axes) and its velocity changes by `kick`: the derivative of the
    /// integrand, integrated. With `da = dphi x a` for the arm a = R r,
    ///     drho = -K (do + da) - B (dv + dw x a + w x da),   dm = int da x rho + a x drho.
    fn change(&self, at: &Instant, step: &Twist, kick: &Twist) -> Wrench {
        let mut total = Wrench::zero();
        for node in &self.nodes {
            let arm = at.rotation * node.point;
            let turned = step.angular.cross(&arm);
            let speed = kick.linear + kick.angular.cross(&arm) + at.twist.angular.cross(&turned);
            let change = -self.stiffen(&at.normal, &(step.linear + turned)) - self.damp(&at.normal, &speed);
            let traction = self.traction(at, &node.point);
            total.force += change * node.weight;
            total.moment += (turned.cross(&traction) + arm.cross(&change)) * node.weight;
        }
        total
    }

    /// The wrench of a sole at rest on ground at rest, and its changes when the REST frame moves along, or
    /// turns about, each world axis: `rho = K (d + (R0 - R) r)`, `drho = K (do0 + dphi x R0 r)`.
    pub(super) fn carried(&self, rest: &RestOffset) -> (Wrench, [Wrench; 6]) {
        let (mut total, mut changes) = (Wrench::zero(), [Wrench::zero(); 6]);
        for node in &self.nodes {
            let arm = self.motion.pose.rotation * node.point;
            let apart = rest.turn * arm;
            let traction = self.stiffen(&self.normal, &(rest.offset + apart)) * node.weight;
            total.force += traction;
            total.moment += arm.cross(&traction);
            for (i, change) in changes.iter_mut().enumerate() {
                let axis = Vec3::ith(i % 3, 1.0);
                let moved = if i < 3 { axis } else { axis.cross(&(arm + apart)) };
                let traction = self.stiffen(&self.normal, &moved) * node.weight;
                change.force += traction;
                change.moment += arm.cross(&traction);
            }
        }
        (total, changes)
    }

    /// What the law says of the present, whatever was measured.
    pub fn law_now(&self) -> Wrench {
        self.law(&self.present())
    }

    /// Wrench at the start of the tick: measured where given, else the law's.
    pub fn now(&self) -> Wrench {
        self.measured.unwrap_or_else(|| self.law_now())
    }

    /// Wrench at the tick's end by the law linearised at the drift state (the state reached without
    /// acceleration), along the sole acceleration `a`:
    /// `w+ = w_drift - G a`, `G a = T D a + c T^2 S diag(I, J_l(T w)) a`.
    pub fn end(&self, tick: (f64, TickRule), a: &Twist) -> Wrench {
        let drift = self.law(&self.advanced(tick, &Twist::zero()));
        self.corrected(sum(&drift, &self.along(tick, a)))
    }

    /// `-G a`: the change of the tick-end wrench along the sole acceleration `a`.
    pub fn along(&self, tick: (f64, TickRule), a: &Twist) -> Wrench {
        let (time, reach) = (tick.0, rule_factors(tick.1).0 * tick.0 * tick.0);
        let turn = left_jacobian_so3(&(self.motion.twist.angular * time)) * a.angular;
        let step = Twist { linear: a.linear * reach, angular: turn * reach };
        let kick = Twist { linear: a.linear * time, angular: a.angular * time };
        self.change(&self.advanced(tick, &Twist::zero()), &step, &kick)
    }

    /// Wrench at the end of the drift, the motion without acceleration.
    pub fn drift(&self, time: f64) -> Wrench {
        self.corrected(self.law(&self.drifted(time)))
    }

    /// Change of the wrench at the end of the drift, to first order, see `change`.
    pub(super) fn change_at_drift(&self, time: f64, step: &Twist, kick: &Twist) -> Wrench {
        self.change(&self.drifted(time), step, kick)
    }

    /// The law itself where the sole has come away from the end of its drift by `step`, its velocity changed by `kick`.
    pub(super) fn end_away(&self, time: f64, step: &Twist, kick: &Twist) -> Wrench {
        let twist = &self.motion.twist;
        let turning = log_so3(&(exp_so3(&step.angular) * exp_so3(&(twist.angular * time))));
        self.corrected(self.law(&self.instant(time, &(twist.linear * time + step.linear), &turning, kick)))
    }

    fn drifted(&self, time: f64) -> Instant {
        let twist = &self.motion.twist;
        self.instant(time, &(twist.linear * time), &(twist.angular * time), &Twist::zero())
    }

    /// Polar radius of the sole about its origin, `sqrt(int r^2 dA / A)` (m); one metre for a point foot.
    pub fn radius(&self) -> f64 {
        let area: f64 = self.nodes.iter().map(|n| n.weight).sum();
        let polar: f64 = self.nodes.iter().map(|n| n.weight * n.point.norm_squared()).sum();
        if polar > 0.0 { (polar / area).sqrt() } else { 1.0 }
    }

    /// The same by the law itself at the predicted state, nothing linearised.
    pub fn end_exact(&self, tick: (f64, TickRule), a: &Twist) -> Wrench {
        self.corrected(self.law(&self.advanced(tick, a)))
    }

    /// With a measured wrench the law supplies only the change.
    fn corrected(&self, law: Wrench) -> Wrench {
        match self.measured {
            None => law,
            Some(measured) => {
                let now = self.law_now();
                Wrench {
                    force: measured.force + (law.force - now.force),
                    moment: measured.moment + (law.moment - now.moment),
                }
            }
        }
    }
}

/// Part of `v` along the normal times one coefficient, the rest times the other.
fn split(normal: &Vec3, along: f64, across: f64, v: &Vec3) -> Vec3 {
    let part = normal * normal.dot(v);
    part * along + (v - part) * across
}

fn sum(a: &Wrench, b: &Wrench) -> Wrench {
    Wrench { force: a.force + b.force, moment: a.moment + b.moment }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::certify::rest;
    use crate::contact::{Ground, Rest};
    use crate::spatial::Pose;
    use crate::spatial::polygon::Polygon;

    fn rectangle() -> SoleShape {
        let corners = vec![[0.11, -0.05], [0.11, 0.05], [-0.11, 0.05], [-0.11, -0.05]];
        SoleShape::Polygon(Polygon::new(corners).expect("convex"))
    }

    fn hexagon() -> SoleShape {
        let corners = vec![[0.14, -0.03], [0.14, 0.02], [0.10, 0.05], [-0.08, 0.04], [-0.08, -0.04], [0.08, -0.05]];
        SoleShape::Polygon(Polygon::new(corners).expect("convex"))
    }

    /// The rectangle of the bonded-sole values (derived, quadrature): isotropic k = 3e6 N/m^3, b = 1.5e4 N s/m^3.
    fn ground(rest: Rest) -> Ground {
        let material = Material {
            normal_stiffness: 3e6,
            tangential_stiffness: 3e6,
            normal_damping: 1.5e4,
            tangential_damping: 1.5e4,
        };
        Ground { law: Law::Bonded(material), normal: Vec3::z(), rest, rest_twist: Twist::zero(), measured: None }
    }

    fn moving() -> SoleMotion {
        SoleMotion {
            pose: Pose {
                rotation: exp_so3(&Vec3::new(0.03, -0.05, 0.02)),
                translation: Vec3::new(0.001, -0.0015, -0.004),
            },
            twist: Twist { linear: Vec3::new(0.02, -0.01, -0.05), angular: Vec3::new(0.1, 0.3, -0.2) },
        }
    }

    fn close(a: &Wrench, b: &Wrench, bound: f64) {
        let off = (a.to_vec6() - b.to_vec6()).amax();
        assert!(off <= bound, "off by {off}: {a:?} against {b:?}");
    }

    #[test]
    fn law_at_a_turned_and_moving_sole() {
        // Derived, by an independent quadrature to 1e-13.
        let cases = [
            (
                rectangle(),
                Vec3::new(-72.6, 102.3, 280.5),
                Vec3::new(-1.6567053241189467, 12.982256316142955, -5.931621908958925),
            ),
            (
                hexagon(),
                Vec3::new(-60.94654203639363, 58.684077827203666, 163.08291358348845),
                Vec3::new(-1.1454009614464178, 5.523661114485344, -2.872723414026121),
            ),
        ];
        for (shape, force, moment) in cases {
            let ground = ground(Rest::Pose(Pose::identity()));
            let bed = rest::bed(&Patch { shape: &shape, ground: &ground }, &moving()).expect("soft");
            close(&bed.law_now(), &Wrench { force, moment }, 1e-11);
        }
    }

    #[test]
    fn finite_turns_about_the_centre() {
        // Derived: My = -266.2 sin(theta), Mz = -321.2 sin(psi).
        let (shape, ground) = (rectangle(), ground(Rest::Pose(Pose::identity())));
        for (axis, moment) in [(Vec3::y(), -127.62307837643885), (Vec3::z(), -153.99148299967004)] {
            let pose = Pose { rotation: exp_so3(&(axis * 0.5)), translation: Vec3::zeros() };
            let motion = SoleMotion { pose, twist: Twist::zero() };
            let bed = rest::bed(&Patch { shape: &shape, ground: &ground }, &motion).expect("soft");
            close(&bed.law_now(), &Wrench { force: Vec3::zeros(), moment: axis * moment }, 1e-10);
        }
    }

    #[test]
    fn linearised_end_is_the_derivative_of_the_exact_end() {
        // Derived: second-order differences of the law itself, moving and turning ground, oblique normal.
        for rule in [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Explicit] {
            let mut ground = ground(Rest::Pose(Pose::identity()));
            ground.normal = Vec3::new(0.2, -0.1, 1.0).normalize();
            ground.rest_twist = Twist { linear: Vec3::new(0.1, 0.0, 0.2), angular: Vec3::new(0.5, -0.3, 0.7) };
            ground.law = Law::Bonded(Material {
                normal_stiffness: 3e6,
                tangential_stiffness: 1e6,
                normal_damping: 1.5e4,
                tangential_damping: 2e4,
            });
            let shape = hexagon();
            let bed = rest::bed(&Patch { shape: &shape, ground: &ground }, &moving()).expect("soft");
            let tick = (0.02, rule);
            let a = Twist { linear: Vec3::new(3.0, -2.0, 5.0), angular: Vec3::new(7.0, 4.0, -9.0) };
            let part = |s: f64| {
                let scaled = Twist { linear: a.linear * s, angular: a.angular * s };
                bed.end_exact(tick, &scaled).to_vec6()
            };
            let h = 1e-3;
            let slope = (part(h) - part(-h)) / (2.0 * h);
            close(&bed.along(tick, &a), &Wrench::from_vec6(&slope), 1e-5 * slope.amax());
            close(&bed.end(tick, &Twist::zero()), &bed.end_exact(tick, &Twist::zero()), 1e-12);
        }
    }

    #[test]
    fn rest_poses_carry_what_they_should() {
        let wanted = Wrench { force: Vec3::new(20.0, -35.0, 310.0), moment: Vec3::new(2.0, -9.0, 1.5) };
        let shape = hexagon();
        let mut still = moving();
        still.twist = Twist::zero();
        let ground = ground(Rest::Carries(wanted));
        let bed = rest::bed(&Patch { shape: &shape, ground: &ground }, &still).expect("carried");
        close(&bed.law_now(), &wanted, 1e-9);
        // No tangential stiffness: what acts along the ground is not carried by any pose.
        let mut slippery = ground;
        slippery.law = Law::Bonded(Material {
            normal_stiffness: 3e6,
            tangential_stiffness: 0.0,
            normal_damping: 1e4,
            tangential_damping: 1e4,
        });
        assert!(rest::bed(&Patch { shape: &shape, ground: &slippery }, &still).is_none());
    }

    #[test]
    fn touchdown_lays_the_sole_on_the_plane() {
        let normal = Vec3::new(0.3, -0.2, 1.0).normalize();
        let pose = moving().pose;
        let plane_point = Vec3::new(0.4, 0.1, 0.02);
        let mut ground = ground(Rest::Touchdown { pose, plane_point });
        ground.normal = normal;
        let shape = rectangle();
        let bed = rest::bed(&Patch { shape: &shape, ground: &ground }, &moving()).expect("soft");
        let rotation = (Mat3::identity() + bed.rest.turn) * pose.rotation;
        assert!((rotation * Vec3::z() - normal).norm() < 1e-14);
        let origin = pose.translation + bed.rest.offset;
        assert!((origin - plane_point).dot(&normal).abs() < 1e-15);
        assert!((origin - pose.translation).cross(&normal).norm() < 1e-15);
        // The smallest rotation onto the plane has no part about the normal.
        let tilt = crate::spatial::log_so3(&(rotation * pose.rotation.transpose()));
        assert!(tilt.dot(&normal).abs() < 1e-14);
    }
}
