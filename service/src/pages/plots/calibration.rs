//! Calibration curves.

use plotters::prelude::*;

use super::{Area, Drawn, GRID, INK, OBSERVED, PREDICTED, percent_label, picture, text_style};

/// One bin of a calibration curve.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct CurvePoint {
    /// Mean probability of the records in the bin.
    pub(crate) predicted: f64,
    /// Share of them that was of the category.
    pub(crate) observed: f64,
    /// Interval of that share.
    pub(crate) interval: [f64; 2],
}

/// Calibration of one category: observed share against mean probability, with intervals.
pub(crate) fn calibration(category: &str, points: &[CurvePoint]) -> String {
    let label = format!("Calibration of {category}");
    picture((320, 300), &label, |area| draw_calibration(area, category, points))
}

fn draw_calibration(area: &Area, category: &str, points: &[CurvePoint]) -> Drawn {
    let mut chart = ChartBuilder::on(area)
        .caption(category, text_style(14))
        .margin(8)
        .margin_right(24)
        .x_label_area_size(28)
        .y_label_area_size(44)
        .build_cartesian_2d(0.0..1.0, 0.0..1.0)?;
    chart
        .configure_mesh()
        .light_line_style(TRANSPARENT)
        .bold_line_style(GRID)
        .axis_style(GRID)
        .x_labels(5)
        .y_labels(5)
        .x_label_formatter(&percent_label)
        .y_label_formatter(&percent_label)
        .label_style(text_style(12))
        .draw()?;
    let diagonal = PathElement::new(vec![(0.0, 0.0), (1.0, 1.0)], PREDICTED.stroke_width(2));
    chart.draw_series([diagonal])?;
    let whiskers = points.iter().map(|point| {
        PathElement::new(
            vec![(point.predicted, point.interval[0]), (point.predicted, point.interval[1])],
            INK,
        )
    });
    chart.draw_series(whiskers)?;
    let dots =
        points.iter().map(|point| Circle::new((point.predicted, point.observed), 4, OBSERVED.filled()));
    chart.draw_series(dots)?;
    Ok(())
}
