//! Ratios measured in one run, on the demonstration biped standing on soft ground:
//! one weighted level with refinement beside the same problem handed to the engine with its default settings, and
//! three strict levels beside one. `cargo bench --bench solve`.
//!
//! The engine's problem is the same statement: all variables sparse, task residuals as variables with a diagonal
//! cost, in the same scaled units; only its settings are the defaults, and no refinement follows.

#[path = "../common/biped.rs"]
mod biped;
mod timing;

use std::hint::black_box;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clarabel::algebra::CscMatrix;
use clarabel::solver::{DefaultSettings, DefaultSolver, IPSolver, SupportedConeT};
use timing::{interleaved, report};
use underfoot::conic::{Cone, Hierarchy};
use underfoot::problem::question::*;
use underfoot::problem::{assemble, scene::Scene};
use underfoot::reference;
use underfoot::solve;

fn with_priorities(priorities: [u32; 5]) -> Question {
    let mut question = biped::standing(2e6);
    for (task, priority) in question.tasks.iter_mut().zip(priorities) {
        task.importance = Importance::Priority(priority);
    }
    question
}

/// Knees limited to 11 N m, below the 13 N m the crouch wants, and a centre of mass to be moved fast: limits bind, so the
/// engine is needed where Newton steps alone would do otherwise.
fn with_binding_limits(mut question: Question) -> Question {
    let model = question.model.clone();
    if let LimitKind::Torque(list) = &mut question.limits[0].kind {
        list.iter_mut().filter(|t| model.joints[t.0].name.ends_with("knee")).for_each(|t| t.1 = 11.0);
    }
    question
}

fn hierarchy(question: &Question) -> Hierarchy {
    let scene = Scene::new(question).expect("the demonstration's ground is sound");
    assemble(question, &scene, &[]).hierarchy
}

/// The single level of `hierarchy` with default settings; returns the first entry so that nothing is optimised away.
fn engine_default(hierarchy: &Hierarchy) -> f64 {
    let level = &hierarchy.levels[0];
    let (n, r) = (hierarchy.columns.len(), level.residuals.rhs.len());
    let (mut rows, mut cols, mut values, mut rhs) = (vec![], vec![], vec![], vec![]);
    let mut entry = |i: usize, j: usize, v: f64| {
        rows.push(i);
        cols.push(j);
        values.push(v);
    };
    for i in 0..r {
        for (j, v) in level.residuals.matrix.row(i) {
            entry(i, j, v);
        }
        entry(i, n + i, -1.0);
        rhs.push(level.residuals.rhs[i]);
    }
    for i in 0..hierarchy.hard.rhs.len() {
        for (j, v) in hierarchy.hard.matrix.row(i) {
            entry(r + i, j, v);
        }
        rhs.push(hierarchy.hard.rhs[i]);
    }
    let a = CscMatrix::new_from_triplets(rhs.len(), n + r, rows, cols, values);
    let diagonal: Vec<f64> = (0..n + r).map(|j| if j < n { 0.0 } else { 2.0 * level.residuals.weight[j - n] }).collect();
    let index: Vec<usize> = (n..n + r).collect();
    let p = CscMatrix::new_from_triplets(n + r, n + r, index.clone(), index, diagonal[n..].to_vec());
    let mut cones = vec![SupportedConeT::ZeroConeT(r)];
    cones.extend(hierarchy.hard.cones.iter().map(|c| match *c {
        Cone::Zero(k) => SupportedConeT::ZeroConeT(k),
        Cone::Nonnegative(k) => SupportedConeT::NonnegativeConeT(k),
        Cone::SecondOrder(k) => SupportedConeT::SecondOrderConeT(k),
    }));
    let settings = DefaultSettings { verbose: false, ..DefaultSettings::default() };
    let mut solver = DefaultSolver::new(&p, &vec![0.0; n + r], &a, &rhs, &cones, settings).expect("a sound program");
    solver.solve();
    solver.solution.x[0]
}

fn main() {
    let one = hierarchy(&with_priorities([1, 1, 1, 1, 1]));
    let three = hierarchy(&with_priorities([1, 2, 2, 3, 3]));
    let question = with_priorities([1, 2, 2, 3, 3]);
    let one_bound = hierarchy(&with_binding_limits(with_priorities([1, 1, 1, 1, 1])));
    let three_bound = hierarchy(&with_binding_limits(with_priorities([1, 2, 2, 3, 3])));
    let cancel = Arc::new(AtomicBool::new(false));
    let options = solve::Options::default();
    let solve_one = || solve::solve(black_box(&one), &options, None).expect("a sound hierarchy").x[0];
    let times = interleaved(
        200,
        &mut [
            &mut || engine_default(black_box(&one)),
            &mut || solve_one(),
            &mut || solve::solve(black_box(&three), &options, None).expect("a sound hierarchy").x[0],
            &mut || engine_default(black_box(&one_bound)),
            &mut || solve::solve(black_box(&one_bound), &options, None).expect("a sound hierarchy").x[0],
            &mut || solve::solve(black_box(&three_bound), &options, None).expect("a sound hierarchy").x[0],
            &mut || reference::solve(black_box(&question), &cancel).map_or(0.0, |a| a.levels.len() as f64),
        ],
    );
    report("engine with default settings, one level", times[0], None);
    report("one level with refinement and tie-break", times[1], Some(("engine default", times[0])));
    report("three strict levels", times[2], Some(("one level", times[1])));
    report("limits bind: engine with default settings", times[3], None);
    report("limits bind: one level", times[4], Some(("engine default", times[3])));
    report("limits bind: three strict levels", times[5], Some(("one level", times[4])));
    report("question to certified answer, three levels", times[6], Some(("three levels", times[2])));
}
