//! Property tests: the choice of world axes, and of where a sole is cut, does not matter.

mod contact_support;

use contact_support::{Dice, HEX_SOLE, Situation, patch, shape};
use proptest::prelude::*;
use underfoot::contact::friction::vertex::vertex_set;
use underfoot::contact::friction::wrench_set::{WrenchSetTerms, margins, wrench_set};
use underfoot::contact::friction::{ConeForm, PyramidSide};
use underfoot::contact::law::bonded_wrench;
use underfoot::contact::rest::resolve;
use underfoot::contact::tick::tick_map;
use underfoot::contact::{Ground, Rest, SoleMotion, TickRule};
use underfoot::spatial::{Mat3, Mat6, Pose, Twist, Vec3, Vec6, Wrench, head, stack, tail};

fn turned_pose(q: &Mat3, shift: &Vec3, pose: &Pose) -> Pose {
    Pose { rotation: *q, translation: *shift }.compose(pose)
}

fn turned_twist(q: &Mat3, twist: &Twist) -> Twist {
    Twist { linear: q * twist.linear, angular: q * twist.angular }
}

fn turned(q: &Mat3, v: &Vec6) -> Vec6 {
    stack(&(q * head(v)), &(q * tail(v)))
}

fn turned_matrix(q: &Mat3, m: &Mat6) -> Mat6 {
    let mut both = Mat6::zeros();
    both.fixed_view_mut::<3, 3>(0, 0).copy_from(q);
    both.fixed_view_mut::<3, 3>(3, 3).copy_from(q);
    both * m * both.transpose()
}

/// The same situation seen from other world axes.
fn elsewhere(s: &Situation, q: &Mat3, shift: &Vec3) -> Situation {
    Situation {
        shape: s.shape.clone(),
        material: s.material,
        normal: q * s.normal,
        rest: turned_pose(q, shift, &s.rest),
        rest_twist: turned_twist(q, &s.rest_twist),
        motion: SoleMotion {
            pose: turned_pose(q, shift, &s.motion.pose),
            twist: turned_twist(q, &s.motion.twist),
        },
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 128, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn other_world_axes_turn_the_tick_map(seed in 1u64..u64::MAX) {
        let mut dice = Dice::new(seed);
        let s = Situation::random(&mut dice, &HEX_SOLE);
        let (q, shift) = (dice.rotation(), dice.vector(1.0));
        let t = elsewhere(&s, &q, &shift);
        let rule = TickRule::Trapezoid;
        let map = |s: &Situation| {
            let ground = s.ground();
            tick_map(&patch(&s.shape, &ground), &s.motion, rule, 0.005, 39.0)
        };
        let (a, b) = (map(&s).expect("a map"), map(&t).expect("a map"));
        let near = |got: &Vec6, expected: &Vec6| {
            let size = expected.amax().max(1e-12);
            (got - expected).amax() <= 1e-9 * size
        };
        let near_matrix = |got: &Mat6, expected: &Mat6| (got - expected).amax() <= 1e-9 * expected.amax();
        prop_assert!(near(&b.drift, &turned(&q, &a.drift)));
        prop_assert!(near(&b.now.to_vec6(), &turned(&q, &a.now.to_vec6())));
        prop_assert!(near(&b.right_side, &turned(&q, &a.right_side)));
        prop_assert!(near_matrix(&b.gain, &turned_matrix(&q, &a.gain)));
        prop_assert!(near_matrix(&b.stiffness, &turned_matrix(&q, &a.stiffness)));
        prop_assert!(near_matrix(&b.damping, &turned_matrix(&q, &a.damping)));
        prop_assert!(near_matrix(&b.acceleration_part, &turned_matrix(&q, &a.acceleration_part)));
        prop_assert!(near_matrix(&b.wrench_part, &turned_matrix(&q, &a.wrench_part)));
    }

    #[test]
    fn other_world_axes_turn_the_rest_pose(seed in 1u64..u64::MAX) {
        let mut dice = Dice::new(seed);
        let mut s = Situation::random(&mut dice, &HEX_SOLE);
        s.material = contact_support::isotropic(1e6, 1e4);
        let wrench = dice.wrench(200.0, 4.0);
        let (q, shift) = (dice.rotation(), dice.vector(1.0));
        let t = elsewhere(&s, &q, &shift);
        let ground = Ground { rest: Rest::Carries(wrench), ..s.ground() };
        let there = Ground { rest: Rest::Carries(wrench.rotated(&q)), ..t.ground() };
        let a = resolve(&patch(&s.shape, &ground), &s.motion).expect("a rest pose");
        let b = resolve(&patch(&t.shape, &there), &t.motion).expect("a rest pose");
        let expected = turned_pose(&q, &shift, &a);
        prop_assert!((b.rotation - expected.rotation).amax() < 1e-11);
        prop_assert!((b.translation - expected.translation).amax() < 1e-12);
    }

    #[test]
    fn other_world_axes_leave_friction_rows_alone(seed in 1u64..u64::MAX) {
        let mut dice = Dice::new(seed);
        let sole = shape(&HEX_SOLE);
        let (rotation, normal, q) = (dice.rotation(), dice.vector(1.0).normalize(), dice.rotation());
        let wrench = dice.wrench(300.0, 20.0);
        let (w, w_there): ([f64; 6], [f64; 6]) = (wrench.to_vec6().into(), wrench.rotated(&q).to_vec6().into());
        for form in [ConeForm::Exact, ConeForm::Pyramid { facets: 5, side: PyramidSide::Inscribed }] {
            let terms = WrenchSetTerms { mu: 0.7, mu_z: Some(0.05), form };
            let here = wrench_set(&sole, &rotation, &normal, &terms, 400.0).expect("a set");
            let there = wrench_set(&sole, &(q * rotation), &(q * normal), &terms, 400.0).expect("a set");
            for (a, b) in here.blocks.iter().zip(&there.blocks) {
                for (x, y) in a.values(&w).iter().zip(b.values(&w_there)) {
                    prop_assert!((x - y).abs() < 1e-9);
                }
            }
            let force = dice.vector(100.0);
            let turned_force = q * force;
            let here = vertex_set(&sole, &rotation, &normal, 0.7, form, 400.0).expect("a set");
            let there = vertex_set(&sole, &(q * rotation), &(q * normal), 0.7, form, 400.0).expect("a set");
            for (a, b) in here.vertices.iter().zip(&there.vertices) {
                let (x, y) = (a.map * force, b.map * turned_force);
                prop_assert!((turned(&q, &x) - y).amax() < 1e-9);
                let (x, y) = (a.blocks[0].margin(&force.into()), b.blocks[0].margin(&turned_force.into()));
                prop_assert!((x - y).abs() < 1e-9);
            }
        }
    }

    /// A wrench is in the vertex set's inscribed pyramid only if it is in the exact cone, and in the exact
    /// cone only if in the circumscribed pyramid.
    #[test]
    fn pyramids_nest(seed in 1u64..u64::MAX, facets in 3usize..64) {
        let mut dice = Dice::new(seed);
        let (rotation, normal) = (dice.rotation(), dice.vector(1.0).normalize());
        let force: [f64; 3] = (normal * 80.0 + dice.vector(100.0)).into();
        let margin = |form| {
            let set = vertex_set(&shape(&HEX_SOLE), &rotation, &normal, 0.6, form, 100.0).expect("a set");
            set.vertices[0].blocks[0].margin(&force)
        };
        let inner = margin(ConeForm::Pyramid { facets, side: PyramidSide::Inscribed });
        let exact = margin(ConeForm::Exact);
        let outer = margin(ConeForm::Pyramid { facets, side: PyramidSide::Circumscribed });
        if inner >= 1e-9 {
            prop_assert!(exact >= 0.0);
        }
        prop_assert!(outer >= exact - 1e-9);
    }

    /// Vertex forces in their cones give a wrench whose centre of pressure and friction pass the wrench set, when
    /// the ground normal is the sole's z axis.
    #[test]
    fn vertex_wrenches_lie_in_the_wrench_set(seed in 1u64..u64::MAX) {
        let mut dice = Dice::new(seed);
        let rotation = dice.rotation();
        let normal: Vec3 = rotation.column(2).into();
        let sole = shape(&HEX_SOLE);
        let set = vertex_set(&sole, &rotation, &normal, 0.6, ConeForm::Exact, 100.0).expect("a set");
        let forces: Vec<Vec3> = set.vertices.iter().map(|_| {
            let pressing = 50.0 * (1.0 + dice.signed());
            let side = normal.cross(&dice.vector(1.0));
            normal * pressing + side.normalize() * (0.6 * pressing * dice.signed())
        }).collect();
        let wrench = Wrench::from_vec6(&set.wrench(&forces));
        let terms = WrenchSetTerms { mu: 0.6, mu_z: None, form: ConeForm::Exact };
        let got = margins(&sole, &rotation, &normal, &terms, &wrench);
        prop_assert!(got.friction >= -1e-9);
        prop_assert!(got.edges.expect("pressed").iter().all(|d| *d >= -1e-12));
    }

    /// A sole cut in two carries what its parts carry.
    #[test]
    fn the_parts_of_a_sole_add_up(seed in 1u64..u64::MAX, cut in -0.07f64..0.07) {
        let mut dice = Dice::new(seed);
        let rectangle = [[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]];
        let back = [[-0.11, -0.05], [cut, -0.05], [cut, 0.05], [-0.11, 0.05]];
        let front = [[cut, -0.05], [0.11, -0.05], [0.11, 0.05], [cut, 0.05]];
        let s = Situation::random(&mut dice, &rectangle);
        let law = |vertices: &[[f64; 2]]| {
            bonded_wrench(&shape(vertices), &s.material, &s.normal, &s.rest, &s.rest_twist, &s.motion).to_vec6()
        };
        let (whole, parts) = (law(&rectangle), law(&back) + law(&front));
        prop_assert!((whole - parts).amax() <= 1e-11 * whole.amax());
    }
}
