//! Carried loads: masses the robot holds, merged into the bodies that hold them.

use super::identity::Hasher;
use super::{Model, xml::MAX_MAGNITUDE};
use crate::spatial::{Inertia, Mat3, Vec3};

/// A mass fixed to a frame of the robot.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Load {
    /// Index of the frame that carries it.
    pub frame: usize,
    /// Mass (kg), >= 0.
    pub mass: f64,
    /// Centre of mass in the frame's axes (m).
    pub center: Vec3,
    /// Rotational inertia about its centre of mass, frame axes (kg m^2); zero for a point mass.
    pub about_center: Mat3,
}

/// A load that cannot be carried.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum LoadError {
    /// No such frame.
    #[error("load {load}: there is no frame {frame}")]
    UnknownFrame {
        /// Which load.
        load: usize,
        /// The frame index it gave.
        frame: usize,
    },
    /// Mass properties no load can have.
    #[error("load {load}: {reason}")]
    NonPhysical {
        /// Which load.
        load: usize,
        /// What was expected and what came.
        reason: String,
    },
}

/// The robot with its loads. The id follows from the robot's and the loads; without loads it stays.
///
/// # Errors
/// [`LoadError`] with the index of the load at fault.
pub fn with_loads(model: &Model, loads: &[Load]) -> Result<Model, LoadError> {
    let mut loaded = model.clone();
    if loads.is_empty() {
        return Ok(loaded);
    }
    let mut hasher = Hasher::new("underfoot loads 1");
    hasher.text(&model.id);
    hasher.count(loads.len());
    for (index, load) in loads.iter().enumerate() {
        let unknown = LoadError::UnknownFrame { load: index, frame: load.frame };
        let frame = model.frames.get(load.frame).ok_or(unknown.clone())?;
        check(load).map_err(|reason| LoadError::NonPhysical { load: index, reason })?;
        let Load { mass, center, about_center, .. } = *load;
        let placed = Inertia { mass, center, about_center }.placed(&frame.placement);
        let body = loaded.bodies.get_mut(frame.body).ok_or(unknown)?;
        body.inertia = body.inertia.combined(&placed);
        let about = body.inertia.about_center;
        body.inertia.about_center = (about + about.transpose()) * 0.5;
        hasher.text(&frame.name);
        hasher.number(mass);
        hasher.vector(&center);
        hasher.matrix(&about_center);
    }
    loaded.id = hasher.finish();
    Ok(loaded)
}

/// Unlike a link, a load may be a point mass.
fn check(load: &Load) -> Result<(), String> {
    // Written so that NaN is refused.
    if !(0.0..=MAX_MAGNITUDE).contains(&load.mass) {
        return Err(format!("expected a mass of 0 to 1e9 kg, got {}", load.mass));
    }
    if !load.center.iter().all(|c| c.abs() <= MAX_MAGNITUDE) {
        return Err(format!("expected a finite centre, got {:?}", load.center.as_slice()));
    }
    if load.about_center.iter().all(|c| *c == 0.0) {
        return Ok(());
    }
    super::mass::check(load.mass, &load.about_center)
}
