//! Small builders shared by the certificate's tests.
#![allow(dead_code, missing_docs)]

use nalgebra::{DMatrix, DVector};
use underfoot::certify::Certificate;
use underfoot::conic::{Column, Cone, ConicRows, Hierarchy, ResidualRows, RowName, SparseRows};
use underfoot::model::{BaseKind, Body, Joint, JointKind, Model};
use underfoot::spatial::{Inertia, Mat3, Pose, Vec3};

pub fn name(group: &str, part: &str, physics: bool) -> RowName {
    RowName { group: group.into(), part: part.into(), unit: "", scale: 1.0, physics }
}

pub fn column(name: &str) -> Column {
    Column { name: name.into(), unit: "", scale: 1.0 }
}

/// Appends one block with the given dense rows.
pub fn push(rows: &mut ConicRows, cone: Cone, dense: &[(Vec<f64>, f64)], label: &str, physics: bool) {
    assert_eq!(cone.dimension(), dense.len());
    for (k, (row, rhs)) in dense.iter().enumerate() {
        rows.matrix.push(row.iter().copied().enumerate());
        rows.rhs.push(*rhs);
        rows.names.push(name(label, &format!("{}", k + 1), physics));
    }
    rows.cones.push(cone);
}

pub fn residuals(columns: usize, dense: &[(Vec<f64>, f64, f64)]) -> ResidualRows {
    let mut rows = ResidualRows::new(columns);
    for (row, rhs, weight) in dense {
        rows.matrix.push(row.iter().copied().enumerate());
        rows.rhs.push(*rhs);
        rows.weight.push(*weight);
        rows.names.push(name("task", "", false));
    }
    rows
}

pub fn dense(matrix: &SparseRows) -> DMatrix<f64> {
    let mut out = DMatrix::zeros(matrix.rows(), matrix.columns);
    for i in 0..matrix.rows() {
        for (j, v) in matrix.row(i) {
            out[(i, j)] += v;
        }
    }
    out
}

/// Least-squares solution of `a x = b`.
pub fn least_squares(a: &DMatrix<f64>, b: &DVector<f64>) -> DVector<f64> {
    a.clone().svd(true, true).solve(b, 1e-13).expect("both factors were asked for")
}

/// Gives every column and every row a scale of its own, changing no physical value; x is changed to match.
pub fn rescale(hierarchy: &mut Hierarchy, x: &mut [f64]) {
    let column_scale: Vec<f64> = (0..x.len()).map(|j| [0.5, 2.0, 4.0][j % 3]).collect();
    let scaled = |matrix: &SparseRows, row_scale: &dyn Fn(usize) -> f64| {
        let mut out = SparseRows::new(matrix.columns);
        for i in 0..matrix.rows() {
            out.push(matrix.row(i).map(|(j, v)| (j, v * column_scale[j] / row_scale(i))));
        }
        out
    };
    for (j, column) in hierarchy.columns.iter_mut().enumerate() {
        column.scale = column_scale[j];
        x[j] /= column_scale[j];
    }
    let hard = &mut hierarchy.hard;
    let row_scale = |i: usize| [8.0, 0.25][i / 6 % 2];
    hard.matrix = scaled(&hard.matrix, &row_scale);
    for i in 0..hard.rhs.len() {
        hard.rhs[i] /= row_scale(i);
        hard.names[i].scale = row_scale(i);
    }
    for level in &mut hierarchy.levels {
        level.residuals.matrix = scaled(&level.residuals.matrix, &|_| 1.0);
    }
}

pub fn joint(name: &str, kind: JointKind, body: usize, axis: Vec3) -> Joint {
    Joint {
        name: name.into(),
        kind,
        body,
        axis,
        position: None,
        speed: None,
        effort: None,
        rotor_inertia: 0.0,
        viscous_friction: 0.0,
        coulomb_friction: 0.0,
        torque_speed: None,
        actuated: true,
    }
}

pub fn body(name: &str, parent: Option<usize>, joint: Option<usize>, at: Vec3, inertia: Inertia) -> Body {
    let placement = Pose { translation: at, ..Pose::identity() };
    Body { name: name.into(), parent, joint, placement, inertia }
}

/// Names of everything that does not pass, levels as `level 1 stationarity` and so on.
pub fn failing(certificate: &Certificate) -> Vec<String> {
    let mut out: Vec<String> =
        certificate.checks.iter().filter(|c| !c.passes()).map(|c| c.name.to_string()).collect();
    for level in &certificate.levels {
        let figures = [
            ("stationarity", level.stationarity),
            ("complementarity", level.complementarity),
            ("dual", level.dual_violation),
            ("feasibility", level.feasibility),
        ];
        for (what, figure) in figures {
            if !(figure.is_finite() && figure <= level.bound) {
                out.push(format!("level {} {what}", level.priority));
            }
        }
    }
    assert_eq!(out.is_empty(), certificate.holds, "the verdict follows from the figures: {certificate:#?}");
    out
}

/// The planar two-link arm of the textbook case: links of 2 and 1.5 kg, the elbow 0.4 m from the shoulder.
pub fn two_link_arm() -> Model {
    let link = |mass: f64, center: f64, about: f64| Inertia {
        mass,
        center: Vec3::new(center, 0.0, 0.0),
        about_center: Mat3::from_diagonal(&Vec3::new(about / 3.0, about, about)),
    };
    Model {
        name: "arm".into(),
        id: "arm".into(),
        base: BaseKind::Fixed,
        bodies: vec![
            body("base", None, None, Vec3::zeros(), Inertia::zero()),
            body("upper", Some(0), Some(0), Vec3::zeros(), link(2.0, 0.2, 0.03)),
            body("lower", Some(1), Some(1), Vec3::new(0.4, 0.0, 0.0), link(1.5, 0.15, 0.012)),
        ],
        joints: vec![
            joint("shoulder", JointKind::Revolute, 1, Vec3::z()),
            joint("elbow", JointKind::Revolute, 2, Vec3::z()),
        ],
        frames: vec![],
        soles: vec![],
        remarks: vec![],
    }
}
