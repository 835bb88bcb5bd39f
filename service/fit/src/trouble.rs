//! Why there is no estimate.

use crate::alias::sweep;
use crate::error::FitError;
use crate::estimate::{cross_products, layout_after, start_of};
use crate::layout::Layout;
use crate::likelihood::Order;
use crate::newton::{Objective, Stopped, maximise};
use crate::objective::Likelihood;
use crate::raw::BackTransform;
use crate::resolve::Resolved;
use crate::separation::{Separating, SeparationReport, Verdict, decide};
use crate::table::Table;

/// Up to this many pairs of a case and another category it is quick to decide by linear programme
/// whether they are separated.
const QUICK_PAIRS: u64 = 20_000;

/// The error of an optimiser that stopped, from what it found alone.
pub(crate) fn explain(resolved: &Resolved, layout: &Layout, stopped: Stopped) -> FitError {
    match stopped {
        Stopped::Failed(error) => error,
        Stopped::Separated { direction, complete } => {
            let (back, _) = BackTransform::new(&resolved.design, &resolved.scaling, layout.order(), &[]);
            let separating =
                Separating { resolved, back: &back, direction: &direction, complete, free: None };
            FitError::Separated(Box::new(separating.report()))
        }
        Stopped::NotPositive { row, steps, .. } => {
            let term = &resolved.design.terms()[layout.order()[row % layout.terms()]].name;
            let category = resolved.category_names()[1 + row / layout.terms()];
            FitError::NotUnique { iterations: steps, terms: format!("`{term}` of category `{category}`") }
        }
        Stopped::NotConverged { decrement, steps, .. } => {
            FitError::NotConverged { iterations: steps, decrement }
        }
    }
}

/// The error of an optimiser that stopped; whether the data separate the categories is decided by
/// linear programme where the optimiser did not find out, or where that is quick.
pub(crate) fn diagnose(
    table: &mut Table,
    resolved: &Resolved,
    layout: &Layout,
    stopped: Stopped,
) -> Result<FitError, FitError> {
    let near = match &stopped {
        Stopped::Failed(_) => None,
        Stopped::Separated { direction, .. } => {
            (table.rows() * (resolved.category_weights.len() as u64 - 1) <= QUICK_PAIRS).then_some(direction)
        }
        Stopped::NotPositive { point, .. } | Stopped::NotConverged { point, .. } => Some(point),
    };
    let report = match near {
        Some(near) => separation(table, resolved, layout, near)?,
        None => Decision::Undecided,
    };
    Ok(match report {
        Decision::Separated(report) => FitError::Separated(Box::new(report)),
        Decision::Finite | Decision::Undecided => explain(resolved, layout, stopped),
    })
}

/// Whether an estimate exists.
pub(crate) enum Decision {
    Finite,
    Separated(SeparationReport),
    Undecided,
}

/// Decides by linear programme whether an estimate exists for the terms of a layout.
fn separation(
    table: &mut Table,
    resolved: &Resolved,
    layout: &Layout,
    near: &[f64],
) -> Result<Decision, FitError> {
    Ok(match decide(table, layout, resolved.category_weights.len() - 1, near)? {
        Verdict::Finite => Decision::Finite,
        Verdict::Undecided => Decision::Undecided,
        Verdict::Separated { direction, complete, free } => {
            let (back, _) = BackTransform::new(&resolved.design, &resolved.scaling, layout.order(), &[]);
            let (direction, free) = (&direction[..], free.as_deref());
            Decision::Separated(Separating { resolved, back: &back, direction, complete, free }.report())
        }
    })
}

/// Decides for all terms of a design whether an estimate exists.
pub(crate) fn check_separation(table: &mut Table, resolved: &Resolved) -> Result<Decision, FitError> {
    let swept = sweep(cross_products(table, resolved)?.as_ref());
    let layout = layout_after(resolved, &swept);
    let start = start_of(&resolved.category_weights, layout.order());
    let mut likelihood = Likelihood::new(table, &layout, resolved);
    let at = likelihood.evaluate(&start, Order::Information)?;
    let near = match maximise(&mut likelihood, start, at, &mut |_, _| {}) {
        Ok(_) => return Ok(Decision::Finite),
        Err(Stopped::Failed(error)) => return Err(error),
        Err(
            Stopped::Separated { direction: near, .. }
            | Stopped::NotPositive { point: near, .. }
            | Stopped::NotConverged { point: near, .. },
        ) => near,
    };
    separation(table, resolved, &layout, &near)
}
