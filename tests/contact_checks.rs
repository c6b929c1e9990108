//! Check values from outside the project: polygon moments, the bonded sole, friction and centre of pressure.
//! Each test says where its numbers come from; "derived" means worked out for this project and
//! confirmed by the independent method named, not published.

mod contact_support;

use contact_support::{HEX_SOLE, RECTANGLE, checks, isotropic, numbers, shape};
use underfoot::conic::Cone;
use underfoot::contact::friction::vertex::vertex_set;
use underfoot::contact::friction::wrench_set::{WrenchSetTerms, margins, wrench_set};
use underfoot::contact::friction::{ConeForm, PyramidSide, center_of_pressure, friction_use};
use underfoot::contact::law::bonded_wrench;
use underfoot::contact::report::{bed_damping, bed_stiffness};
use underfoot::contact::{Material, SoleMotion};
use underfoot::spatial::polygon::{Moments, SoleShape, moments};
use underfoot::spatial::{Mat3, Pose, Twist, Vec3, Wrench, exp_so3};

fn close(got: f64, expected: f64, tolerance: f64, what: &str) {
    assert!(
        (got - expected).abs() <= tolerance * expected.abs().max(1e-12),
        "{what}: got {got}, expected {expected}"
    );
}

fn moments_are(got: &Moments, expected: [f64; 6], tolerance: f64) {
    let values = [got.area, got.first[0], got.first[1], got.second[0], got.second[1], got.second[2]];
    for (i, (value, wanted)) in values.into_iter().zip(expected).enumerate() {
        close(value, wanted, tolerance, &format!("moment {i}"));
    }
}

/// Derived by hand (rectangle by rectangle, and by integration over the triangle); the sums themselves are the
/// standard polygon formulas, published (Bourke's notes).
#[test]
fn moments_of_an_l_shape_and_a_triangle() {
    let l = [[0.0, 0.0], [3.0, 0.0], [3.0, 1.0], [1.0, 1.0], [1.0, 4.0], [0.0, 4.0]];
    moments_are(&moments(&l), [6.0, 6.0, 9.0, 10.0, 22.0, 6.0], 1e-14);
    let triangle = [[0.0, 0.0], [2.0, 0.0], [0.0, 3.0]];
    moments_are(&moments(&triangle), [3.0, 2.0, 3.0, 2.0, 4.5, 1.5], 1e-14);
}

/// Derived, by quadrature.
#[test]
fn moments_of_the_hex_sole() {
    let expected: [f64; 6] = numbers(&checks()["hex_sole"]["vals"]).try_into().expect("six numbers");
    moments_are(&moments(&HEX_SOLE), expected, 1e-12);
}

const STIFFNESS: f64 = 3e6;
const DAMPING: f64 = 1.5e4;

/// Derived: k A, k L B^3/12, k B L^3/12 and their sum, confirmed by quadrature to 1e-13.
#[test]
fn bed_of_the_rectangle() {
    let (sole, material) = (shape(&RECTANGLE), isotropic(STIFFNESS, DAMPING));
    let k = bed_stiffness(&sole, &material, &Vec3::z(), &Mat3::identity());
    let b = bed_damping(&sole, &material, &Vec3::z(), &Mat3::identity());
    for i in 0..3 {
        close(k[(i, i)], 66000.0, 1e-13, "k A");
        close(b[(i, i)], 330.0, 1e-13, "b A");
    }
    for (axis, (stiffness, damping)) in [(55.0, 0.275), (266.2, 1.331), (321.2, 1.606)].iter().enumerate() {
        close(k[(axis + 3, axis + 3)], *stiffness, 1e-12, "rotational stiffness");
        close(b[(axis + 3, axis + 3)], *damping, 1e-12, "rotational damping");
    }
}

/// Derived: a rigid inverted pendulum (30 kg, 0.8 m) on the bonded rectangle is stable while the pitch
/// stiffness exceeds m g h = 235.44 N m/rad (g = 9.81); critical k = 2653343.35086401 N/m^3.
#[test]
fn critical_stiffness_of_an_inverted_pendulum() {
    let critical = isotropic(2653343.35086401, 0.0);
    let k = bed_stiffness(&shape(&RECTANGLE), &critical, &Vec3::z(), &Mat3::identity());
    close(k[(4, 4)], 30.0 * 9.81 * 0.8, 1e-13, "pitch stiffness at the critical k");
}

fn law_at(vertices: &[[f64; 2]], rest: &Pose, motion: &SoleMotion) -> Wrench {
    let material = isotropic(STIFFNESS, DAMPING);
    bonded_wrench(&shape(vertices), &material, &Vec3::z(), rest, &Twist::zero(), motion)
}

/// Derived: My = -266.2 sin(theta), Mz = -321.2 sin(psi) for finite rotations about the centre,
/// confirmed by quadrature to 1e-13.
#[test]
fn finite_rotations_give_the_sine() {
    for angle in [0.5, -0.2, 1.3] {
        for (axis, stiffness) in [(Vec3::y(), 266.2), (Vec3::z(), 321.2)] {
            let pose = Pose { rotation: exp_so3(&(axis * angle)), translation: Vec3::zeros() };
            let motion = SoleMotion { pose, twist: Twist::zero() };
            let wrench = law_at(&RECTANGLE, &Pose::identity(), &motion);
            close(wrench.moment.dot(&axis), -stiffness * angle.sin(), 1e-13, "moment");
            assert!(wrench.force.norm() < 1e-9);
        }
    }
    let pitch = SoleMotion {
        pose: Pose { rotation: exp_so3(&(Vec3::y() * 0.5)), translation: Vec3::zeros() },
        twist: Twist::zero(),
    };
    let yaw = SoleMotion {
        pose: Pose { rotation: exp_so3(&(Vec3::z() * 0.5)), translation: Vec3::zeros() },
        twist: Twist::zero(),
    };
    close(law_at(&RECTANGLE, &Pose::identity(), &pitch).moment.y, -127.62307837643885, 1e-13, "My");
    close(law_at(&RECTANGLE, &Pose::identity(), &yaw).moment.z, -153.99148299967004, 1e-13, "Mz");
}

/// Derived, by quadrature to 1e-13: both soles displaced, turned and moving.
#[test]
fn bonded_wrench_of_both_soles() {
    let motion = SoleMotion {
        pose: Pose {
            rotation: exp_so3(&Vec3::new(0.03, -0.05, 0.02)),
            translation: Vec3::new(0.001, -0.0015, -0.004),
        },
        twist: Twist {
            linear: Vec3::new(0.02, -0.01, -0.05),
            angular: Vec3::new(0.1, 0.3, -0.2),
        },
    };
    let all = checks();
    for (vertices, name) in [(&RECTANGLE[..], "bonded_rect"), (&HEX_SOLE[..], "bonded_hex_sole")] {
        let wrench = law_at(vertices, &Pose::identity(), &motion);
        let (force, moment) = (numbers(&all[name]["F"]), numbers(&all[name]["M"]));
        for i in 0..3 {
            close(wrench.force[i], force[i], 1e-12, name);
            close(wrench.moment[i], moment[i], 1e-12, name);
        }
    }
}

/// Greatest or least yaw moment of the rectangle's vertex set with five wrench components given: a small conic
/// programme over the vertex forces. An independent solver, used in this test only.
fn extreme_yaw(form: ConeForm, given: [f64; 5], sign: f64) -> f64 {
    use clarabel::algebra::CscMatrix;
    use clarabel::solver::{
        DefaultSettings, DefaultSolver, IPSolver, SolverStatus, SupportedConeT,
    };
    let set = vertex_set(&shape(&RECTANGLE), &Mat3::identity(), &Vec3::z(), 0.7, form, 500.0)
        .expect("a vertex set");
    let columns = 3 * set.vertices.len();
    let mut rows: Vec<Vec<f64>> = Vec::new();
    let mut right = Vec::new();
    for (component, value) in given.into_iter().enumerate() {
        rows.push(set.vertices.iter().flat_map(|v| (0..3).map(|j| v.map[(component, j)])).collect());
        right.push(value);
    }
    let mut cones = vec![SupportedConeT::ZeroConeT(5)];
    for (i, vertex) in set.vertices.iter().enumerate() {
        for block in &vertex.blocks {
            cones.push(match block.cone {
                Cone::SecondOrder(n) => SupportedConeT::SecondOrderConeT(n),
                Cone::Nonnegative(n) => SupportedConeT::NonnegativeConeT(n),
                Cone::Zero(n) => SupportedConeT::ZeroConeT(n),
            });
            for row in &block.rows {
                let mut full = vec![0.0; columns];
                for j in 0..3 {
                    full[3 * i + j] = -row.coefficients[j];
                }
                rows.push(full);
                right.push(0.0);
            }
        }
    }
    let cost: Vec<f64> =
        set.vertices.iter().flat_map(|v| (0..3).map(|j| -sign * v.map[(5, j)])).collect();
    let settings = DefaultSettings {
        verbose: false,
        tol_gap_abs: 1e-11,
        tol_gap_rel: 1e-11,
        tol_feas: 1e-11,
        ..DefaultSettings::default()
    };
    let quadratic = CscMatrix::zeros((columns, columns));
    let matrix = CscMatrix::from(&rows);
    let mut solver = DefaultSolver::new(&quadratic, &cost, &matrix, &right, &cones, settings)
        .expect("a well-formed programme");
    solver.solve();
    assert_eq!(solver.solution.status, SolverStatus::Solved);
    -sign * solver.solution.obj_val
}

const FOUR_AROUND: ConeForm = ConeForm::Pyramid { facets: 4, side: PyramidSide::Circumscribed };

/// Caron, Pham, Nakamura, ICRA 2015, Prop. 2 (published: part read, part quoted from memory; confirmed by 4000
/// corner-force programmes): rectangular wrench cone, half-sides .11 and .05, mu = .7.
#[test]
fn yaw_bounds_of_the_rectangular_wrench_cone() {
    let cases = [
        ([0.0, 0.0, 500.0, 0.0, 0.0], [-56.0, 56.0]),
        ([100.0, -50.0, 500.0, 10.0, -20.0], [-45.5, 24.5]),
        ([200.0, 100.0, 500.0, -15.0, 30.0], [-25.5, 23.5]),
    ];
    for (given, [low, high]) in cases {
        close(extreme_yaw(FOUR_AROUND, given, 1.0), high, 1e-7, "greatest yaw moment");
        close(extreme_yaw(FOUR_AROUND, given, -1.0), low, 1e-7, "least yaw moment");
    }
}

/// Derived, by two conic solvers: with circular cones the bound is mu sqrt(X^2 + Y^2) f_z.
#[test]
fn yaw_bound_with_circular_cones() {
    let bound = extreme_yaw(ConeForm::Exact, [0.0, 0.0, 500.0, 0.0, 0.0], 1.0);
    close(bound, 42.290660907581, 1e-6, "circular cones");
}

/// Inscribed pyramids stay below the circular value, circumscribed ones above, and both close in on it.
#[test]
fn pyramids_bracket_the_cone() {
    let given = [0.0, 0.0, 500.0, 0.0, 0.0];
    let exact = 42.290660907581;
    let mut gap = f64::INFINITY;
    for facets in [4, 8, 16, 32] {
        let bound = |side| extreme_yaw(ConeForm::Pyramid { facets, side }, given, 1.0);
        let (inner, outer) = (bound(PyramidSide::Inscribed), bound(PyramidSide::Circumscribed));
        assert!(inner <= exact + 1e-6 && outer >= exact - 1e-6, "{facets}: {inner} {outer}");
        assert!(outer - inner < 0.6 * gap, "{facets}: {} after {gap}", outer - inner);
        gap = outer - inner;
    }
    assert!(gap < 0.5);
}

/// The zero-moment point is the centre of pressure (Vukobratovic & Borovac 2004, definition, published; number
/// derived): m = 60, z_c = .85, x_c = .03, x_ddot = .6, z_ddot = .4, rate of pitch momentum 2.5; f_z = 612.6 is
/// m (9.81 + .4).
#[test]
fn zero_moment_point_of_a_moving_body() {
    let (mass, center) = (60.0, Vec3::new(0.03, 0.0, 0.85));
    let force = Vec3::new(mass * 0.6, 0.0, mass * (9.81 + 0.4));
    // Angular momentum about the centre changes by m_o - c x f.
    let moment = Vec3::new(0.0, 2.5, 0.0) + center.cross(&force);
    close(force.z, 612.6, 1e-14, "f_z");
    let point = center_of_pressure(&Wrench { force, moment }).expect("pressed");
    close(point[0], -0.024031994776363, 1e-12, "p_x");
    assert_eq!(point[1], 0.0);
}

/// Derived by geometry: a force through a known point of the tilted, turned sole.
#[test]
fn margins_of_the_wrench_set_are_distances() {
    let rotation = exp_so3(&Vec3::new(0.3, -0.2, 0.9));
    let normal = Vec3::new(0.1, -0.2, 1.0).normalize();
    let sole = shape(&RECTANGLE);
    let through = Vec3::new(0.07, -0.02, 0.0);
    let force = normal * 400.0 + normal.cross(&Vec3::new(0.4, 0.5, 0.1)).normalize() * 120.0;
    let free = normal * 3.0;
    let wrench = Wrench { force, moment: (rotation * through).cross(&force) + free };
    let terms = WrenchSetTerms { mu: 0.6, mu_z: Some(0.05), form: ConeForm::Exact };
    let got = margins(&sole, &rotation, &normal, &terms, &wrench);
    close(got.friction, 0.6 * 400.0 - 120.0, 1e-12, "friction margin");
    close(friction_use(&force, &normal, 0.6).expect("pressed"), 0.5, 1e-12, "friction use");
    // The pure moment along n moves the point as well: what counts is (-m_y, m_x)/f_z in sole axes.
    let local = wrench.rotated(&rotation.transpose());
    let p = [-local.moment.y / local.force.z, local.moment.x / local.force.z];
    let expected = [p[1] + 0.05, 0.11 - p[0], 0.05 - p[1], p[0] + 0.11];
    for (value, wanted) in got.edges.expect("pressed").iter().zip(expected) {
        close(*value, wanted, 1e-12, "edge distance");
    }
    let about_center = normal.dot(&wrench.moment); // the rectangle's centroid is its origin
    close(got.yaw.expect("asked for"), 0.05 * 400.0 - about_center.abs(), 1e-12, "yaw margin");

    // The rows say the same as the margins, times f_z (edges) or as they are.
    let set = wrench_set(&sole, &rotation, &normal, &terms, 500.0).expect("a set");
    let w: [f64; 6] = wrench.to_vec6().into();
    close(set.blocks[0].margin(&w), 120.0, 1e-12, "friction rows");
    for (value, wanted) in set.blocks[1].values(&w).iter().zip(expected) {
        close(*value, wanted * local.force.z, 1e-12, "edge rows");
    }
    close(set.blocks[2].margin(&w), 0.05 * 400.0 - about_center.abs(), 1e-12, "yaw rows");
}

/// The yaw moment counts about the centroid: derived from a force through the hex sole's centroid plus a pure
/// moment along the normal, which must come back whole.
#[test]
fn yaw_friction_is_taken_about_the_centroid() {
    let sole = shape(&HEX_SOLE);
    let m = moments(&HEX_SOLE);
    let centroid = Vec3::new(m.first[0] / m.area, m.first[1] / m.area, 0.0);
    let rotation = exp_so3(&Vec3::new(-0.2, 0.4, 1.0));
    let normal = Vec3::new(0.2, 0.1, 1.0).normalize();
    let force = normal * 300.0 + Vec3::new(50.0, 20.0, -10.0);
    let moment = (rotation * centroid).cross(&force) - normal * 7.0;
    let terms = WrenchSetTerms { mu: 0.6, mu_z: Some(0.06), form: ConeForm::Exact };
    let wrench = Wrench { force, moment };
    let got = margins(&sole, &rotation, &normal, &terms, &wrench);
    let bound = 0.06 * normal.dot(&force);
    close(got.yaw.expect("asked for"), bound - 7.0, 1e-12, "yaw margin");
    let set = wrench_set(&sole, &rotation, &normal, &terms, 300.0).expect("a set");
    let rows = set.blocks[2].values(&wrench.to_vec6().into());
    close(rows[0], bound + 7.0, 1e-12, "upper yaw row");
    close(rows[1], bound - 7.0, 1e-12, "lower yaw row");
}

#[test]
fn a_point_sole_has_the_force_cone_alone() {
    let terms = WrenchSetTerms { mu: 0.5, mu_z: Some(0.1), form: ConeForm::Exact };
    let set = wrench_set(&SoleShape::Point, &Mat3::identity(), &Vec3::z(), &terms, 100.0).expect("a set");
    assert_eq!(set.blocks.len(), 1);
    assert_eq!(set.blocks[0].cone, Cone::SecondOrder(3));
    let vertices = vertex_set(&SoleShape::Point, &Mat3::identity(), &Vec3::z(), 0.5, ConeForm::Exact, 100.0)
        .expect("a set");
    assert_eq!(vertices.vertices.len(), 1);
    assert_eq!(vertices.wrench(&[Vec3::new(1.0, 2.0, 3.0)]).as_slice(), [1.0, 2.0, 3.0, 0.0, 0.0, 0.0]);
    assert_eq!(vertices.vertices[0].blocks[0].margin(&[3.0, 4.0, 12.0]), 1.0);
}

#[test]
fn friction_refusals_and_limits() {
    let sole = shape(&RECTANGLE);
    let set = |mu, form| vertex_set(&sole, &Mat3::identity(), &Vec3::z(), mu, form, 100.0);
    assert!(set(-0.1, ConeForm::Exact).is_err());
    assert!(set(f64::NAN, ConeForm::Exact).is_err());
    for facets in [0, 2, 65] {
        assert!(set(0.5, ConeForm::Pyramid { facets, side: PyramidSide::Inscribed }).is_err());
    }
    // Without friction the cone alone would let the ground pull.
    let slippery = set(0.0, ConeForm::Exact).expect("a set");
    let pulling = [0.0, 0.0, -1.0];
    assert!(slippery.vertices[0].blocks.iter().any(|b| b.margin(&pulling) < 0.0));
    assert_eq!(center_of_pressure(&Wrench { force: -Vec3::z(), moment: Vec3::zeros() }), None);
    assert_eq!(friction_use(&Vec3::new(1.0, 0.0, 0.0), &Vec3::z(), 0.5), None);
}

/// The material of a point sole acts on the force alone: derived, f = K d - B v with K by direction.
#[test]
fn a_point_sole_has_no_moment() {
    let material = Material {
        normal_stiffness: 5e4,
        tangential_stiffness: 2e4,
        normal_damping: 300.0,
        tangential_damping: 100.0,
    };
    let motion = SoleMotion {
        pose: Pose { rotation: exp_so3(&Vec3::new(0.2, 0.3, -0.4)), translation: Vec3::new(1e-3, 2e-3, -5e-3) },
        twist: Twist { linear: Vec3::new(0.1, 0.0, -0.2), angular: Vec3::new(1.0, 2.0, 3.0) },
    };
    let w = bonded_wrench(&SoleShape::Point, &material, &Vec3::z(), &Pose::identity(), &Twist::zero(), &motion);
    let expected = [-20.0 - 10.0, -40.0, 250.0 + 60.0];
    for i in 0..3 {
        close(w.force[i], expected[i], 1e-13, "force");
        assert_eq!(w.moment[i], 0.0);
    }
}
