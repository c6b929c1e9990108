//! How links and joints hang together: ends, loops, root, order.

use super::description::{Description, JointPart, JointType, label};
use super::error::{Fault, ModelError};
use std::collections::HashMap;

/// The kinematic tree over the links of a description.
pub(super) struct Tree {
    /// Links that stay, parents before children; the first is the base.
    pub(super) order: Vec<usize>,
    /// Per link, the joint that holds it and the parent link. None for the base and a dropped root.
    pub(super) held_by: Vec<Option<(usize, usize)>>,
}

/// Parent and child link of a joint.
type Ends = (usize, usize);

/// Finds the tree or says what keeps the links from being one.
///
/// A locked joint that would close a loop is left out, and the loop is cut there: as a weld it would
/// tie two branches together, which a tree cannot express. It is a remark, not an error, because
/// the user named that very joint.
pub(super) fn arrange(
    description: &Description,
    remarks: &mut Vec<String>,
) -> Result<Tree, ModelError> {
    if description.links.is_empty() {
        return Err(ModelError {
            fault: Fault::NoLinks,
            element: "robot description".to_string(),
            subject: description.place,
        });
    }
    let ends = find_ends(description)?;
    check_types(description)?;
    let mut held_by = choose_parents(description, &ends, remarks)?;
    cut_cycles(description, &mut held_by, remarks)?;
    let mut root = find_root(description, &held_by)?;
    let mut children: Vec<Vec<usize>> = vec![Vec::new(); description.links.len()];
    let mut holding: Vec<(usize, Ends)> = Vec::new();
    for (link, held) in held_by.iter().enumerate() {
        holding.extend(held.map(|(joint, parent)| (joint, (parent, link))));
    }
    // By joint, so that branches come in document order.
    holding.sort_unstable();
    for (_, (parent, link)) in &holding {
        children[*parent].push(*link);
    }
    if let Some(base) = drop_massless_root(description, &holding, root, &children, remarks)? {
        held_by[base] = None;
        root = base;
    }
    let (mut order, mut stack) = (Vec::new(), vec![root]);
    while let Some(link) = stack.pop() {
        order.push(link);
        stack.extend(children[link].iter().rev());
    }
    Ok(Tree { order, held_by })
}

fn find_ends(description: &Description) -> Result<Vec<Ends>, ModelError> {
    let links: HashMap<&str, usize> =
        description.links.iter().enumerate().map(|(i, l)| (l.name.as_str(), i)).collect();
    let find = |joint: &JointPart, name: &str, place| {
        links.get(name).copied().ok_or_else(|| {
            joint.error_at(place, Fault::Unknown { what: "link", name: name.to_string() })
        })
    };
    let both = |joint: &JointPart| {
        let parent = find(joint, &joint.parent, joint.parent_place)?;
        Ok((parent, find(joint, &joint.child, joint.child_place)?))
    };
    description.joints.iter().map(both).collect()
}

/// Mimic and planar joints are refused unless locked.
fn check_types(description: &Description) -> Result<(), ModelError> {
    for joint in description.joints.iter().filter(|j| j.locked_at.is_none()) {
        if let Some((follows, place)) = &joint.mimic {
            return Err(joint.error_at(*place, Fault::Mimic(follows.clone())));
        }
        if joint.kind == JointType::Planar {
            return Err(joint.error(Fault::Planar));
        }
    }
    Ok(())
}

/// One parent joint a link. Of several, the one that is not locked stays (the first in document
/// order if all are); two that are not locked are a loop.
fn choose_parents(
    description: &Description,
    ends: &[Ends],
    remarks: &mut Vec<String>,
) -> Result<Vec<Option<(usize, usize)>>, ModelError> {
    let mut held_by: Vec<Option<(usize, usize)>> = vec![None; description.links.len()];
    for (index, (joint, (parent, child))) in description.joints.iter().zip(ends).enumerate() {
        let Some((earlier, _)) = held_by[*child] else {
            held_by[*child] = Some((index, *parent));
            continue;
        };
        let first = &description.joints[earlier];
        if joint.locked_at.is_some() {
            remarks.push(cut_remark(joint));
        } else if first.locked_at.is_some() {
            remarks.push(cut_remark(first));
            held_by[*child] = Some((index, *parent));
        } else {
            return Err(joint.error(Fault::Loop(format!(
                "its child {} is already held by {} ({})",
                label("link", &joint.child),
                label("joint", &first.name),
                first.place
            ))));
        }
    }
    Ok(held_by)
}

fn cut_remark(joint: &JointPart) -> String {
    format!(
        "{}: it would close a loop and is locked, so it is left out and the loop is cut there",
        label("joint", &joint.name)
    )
}

/// Walks up from every link; a walk that meets itself is a cycle. A locked joint on it is cut.
fn cut_cycles(
    description: &Description,
    held_by: &mut [Option<(usize, usize)>],
    remarks: &mut Vec<String>,
) -> Result<(), ModelError> {
    // 0: not seen; otherwise the number of the walk that saw the link first.
    let mut seen_in = vec![0usize; held_by.len()];
    for start in 0..held_by.len() {
        let mut at = start;
        while seen_in[at] == 0 {
            seen_in[at] = start + 1;
            match held_by[at] {
                Some((_, parent)) => at = parent,
                None => break,
            }
        }
        if seen_in[at] != start + 1 || held_by[at].is_none() {
            continue;
        }
        let (mut cycle, entry) = (Vec::new(), at);
        while let Some((joint, parent)) = held_by[at] {
            cycle.push((joint, at));
            at = parent;
            if at == entry {
                break;
            }
        }
        let locked = |entry: &&(usize, usize)| description.joints[entry.0].locked_at.is_some();
        if let Some((joint, link)) = cycle.iter().filter(locked).max() {
            remarks.push(cut_remark(&description.joints[*joint]));
            held_by[*link] = None;
        } else if let Some((joint, _)) = cycle.iter().max() {
            let joint = &description.joints[*joint];
            return Err(joint.error(Fault::Loop(format!(
                "its child {} is an ancestor of its parent {}",
                label("link", &joint.child),
                label("link", &joint.parent)
            ))));
        }
    }
    Ok(())
}

fn find_root(
    description: &Description,
    held_by: &[Option<(usize, usize)>],
) -> Result<usize, ModelError> {
    let mut roots = description.links.iter().enumerate().filter(|(i, _)| held_by[*i].is_none());
    match (roots.next(), roots.next()) {
        (Some((root, _)), None) => Ok(root),
        (Some((_, first)), Some((_, second))) => {
            Err(second.error_at(second.place, Fault::SeveralRoots(first.name.clone())))
        }
        // Cannot be: a finite graph without cycles has a link that nothing holds.
        (None, _) => Err(ModelError {
            fault: Fault::NoLinks,
            element: "robot description".to_string(),
            subject: description.place,
        }),
    }
}

/// The base link below a massless root with a single floating joint, or none if there is no
/// floating joint. Any other floating joint is refused, unless locked.
fn drop_massless_root(
    description: &Description,
    holding: &[(usize, Ends)],
    root: usize,
    children: &[Vec<usize>],
    remarks: &mut Vec<String>,
) -> Result<Option<usize>, ModelError> {
    let mut base = None;
    for (index, (parent, child)) in holding {
        let joint = &description.joints[*index];
        if joint.kind != JointType::Floating || joint.locked_at.is_some() {
            continue;
        }
        let above = &description.links[*parent];
        let why_not = if *parent != root {
            Some(format!("its parent {} is not the root", label("link", &above.name)))
        } else if above.inertial.as_ref().is_some_and(|i| i.mass > 0.0) {
            Some(format!("its parent {} has mass", label("link", &above.name)))
        } else if children[root].len() != 1 {
            Some(format!("its parent {} has other joints", label("link", &above.name)))
        } else {
            None
        };
        if let Some(reason) = why_not {
            return Err(joint.error(Fault::Floating(reason)));
        }
        remarks.push(format!(
            "{} and {}: dropped, the base state stands for them",
            label("link", &above.name),
            label("joint", &joint.name)
        ));
        base = Some(*child);
    }
    Ok(base)
}
