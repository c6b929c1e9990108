//! Torques near a reference.

use super::super::layout::force_unit;
use super::{Context, TargetRow};

/// `tau_j` against its reference; joints without a motor have no row.
pub fn effort(list: &[(usize, f64)], context: &Context) -> Vec<TargetRow> {
    let model = &*context.question.model;
    list.iter()
        .filter_map(|&(j, reference)| {
            let column = context.layout.torque[j]?;
            Some(TargetRow {
                entries: vec![(column, 1.0)],
                offset: 0.0,
                desired: reference,
                part: model.joints[j].name.clone(),
                unit: force_unit(model, model.joint_offset() + j),
                angular: false,
            })
        })
        .collect()
}
