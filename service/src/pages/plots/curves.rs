//! Probabilities of all categories along one field, with bands.

use plotters::coord::types::RangedCoordf64;
use plotters::prelude::*;
use plotters::style::text_anchor::{HPos, VPos};

use super::{Area, Drawn, GRID, INK, anchored, fitting, percent_label, picture, series, text_style};
use crate::numbers::significant;

/// Width and height of a picture.
const SIZE: (u32, u32) = (480, 300);
/// Room for the names of the categories at the right.
const NAMES_WIDTH: u32 = 110;
/// Least distance between two names.
const NAME_HEIGHT: i32 = 15;
/// Characters of a name that fit.
const NAME_LENGTH: usize = 15;

/// The probability of one category along a field.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct CategoryCurve {
    /// Name of the category.
    pub(crate) category: String,
    /// From low to high values of the field.
    pub(crate) points: Vec<Estimated>,
}

/// A probability with its interval.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Estimated {
    /// Value of the field; the number of the level for levels.
    pub(crate) at: f64,
    /// The probability.
    pub(crate) probability: f64,
    /// Its interval.
    pub(crate) interval: [f64; 2],
}

/// Curves along a number. `marks` are values that are marked on the axis.
pub(crate) fn along_number(title: &str, curves: &[CategoryCurve], marks: &[f64]) -> String {
    let label = format!("Probabilities along {title}");
    picture(SIZE, &label, |area| draw_along_number(area, title, curves, marks))
}

/// Points with intervals for each level.
pub(crate) fn along_levels(title: &str, levels: &[String], curves: &[CategoryCurve]) -> String {
    let label = format!("Probabilities by {title}");
    let height = 70 + (levels.len() * (14 * curves.len() + 10)) as u32;
    picture((SIZE.0, height), &label, |area| draw_along_levels(area, title, levels, curves))
}

fn highest(curves: &[CategoryCurve]) -> f64 {
    let ends = curves.iter().flat_map(|curve| &curve.points).map(|point| point.interval[1]);
    (ends.fold(0.1, f64::max) * 1.04).min(1.0)
}

type Chart<'a, 'b> = ChartContext<'b, SVGBackend<'a>, Cartesian2d<RangedCoordf64, RangedCoordf64>>;

fn draw_along_number(area: &Area, title: &str, curves: &[CategoryCurve], marks: &[f64]) -> Drawn {
    let ends = curves.first().and_then(|curve| Some([curve.points.first()?.at, curve.points.last()?.at]));
    let Some([low, high]) = ends.filter(|[low, high]| low < high) else { return Ok(()) };
    let mut chart = ChartBuilder::on(area)
        .caption(fitting(title, 48), text_style(14))
        .margin(8)
        .margin_right(NAMES_WIDTH)
        .x_label_area_size(28)
        .y_label_area_size(44)
        .build_cartesian_2d(low..high, 0.0..highest(curves))?;
    chart
        .configure_mesh()
        .disable_x_mesh()
        .light_line_style(TRANSPARENT)
        .bold_line_style(GRID)
        .axis_style(GRID)
        .x_labels(5)
        .y_labels(5)
        .x_label_formatter(&|value| significant(*value))
        .y_label_formatter(&percent_label)
        .label_style(text_style(12))
        .draw()?;
    for (number, curve) in curves.iter().enumerate() {
        let upper = curve.points.iter().map(|point| (point.at, point.interval[1]));
        let lower = curve.points.iter().rev().map(|point| (point.at, point.interval[0]));
        let band = Polygon::new(upper.chain(lower).collect::<Vec<_>>(), series(number).mix(0.16).filled());
        chart.draw_series([band])?;
    }
    for (number, curve) in curves.iter().enumerate() {
        let line = curve.points.iter().map(|point| (point.at, point.probability));
        chart.draw_series(LineSeries::new(line, series(number).stroke_width(2)))?;
    }
    let tick = highest(curves) * 0.025;
    let inside = marks.iter().filter(|mark| (low..=high).contains(*mark));
    chart.draw_series(inside.map(|&mark| PathElement::new(vec![(mark, 0.0), (mark, tick)], INK)))?;
    draw_names(area, &chart, curves)
}

/// The names of the categories beside the ends of their curves, none over another.
fn draw_names(area: &Area, chart: &Chart, curves: &[CategoryCurve]) -> Drawn {
    let mut places: Vec<(i32, i32, usize)> = curves
        .iter()
        .enumerate()
        .filter_map(|(number, curve)| {
            let last = curve.points.last()?;
            let (x, y) = chart.backend_coord(&(last.at, last.probability));
            Some((y, x, number))
        })
        .collect();
    places.sort_unstable();
    for place in 1..places.len() {
        places[place].0 = places[place].0.max(places[place - 1].0 + NAME_HEIGHT);
    }
    // What was pushed out below moves up again.
    let mut lowest = area.dim_in_pixel().1 as i32 - NAME_HEIGHT;
    for place in places.iter_mut().rev() {
        place.0 = place.0.min(lowest);
        lowest = place.0 - NAME_HEIGHT;
    }
    for (y, x, number) in places {
        let colour = series(number);
        let style = anchored(13, HPos::Left, VPos::Center).color(&colour);
        area.draw(&Text::new(fitting(&curves[number].category, NAME_LENGTH), (x + 6, y), style))?;
    }
    Ok(())
}

fn draw_along_levels(area: &Area, title: &str, levels: &[String], curves: &[CategoryCurve]) -> Drawn {
    let (count, lanes) = (levels.len() as f64, curves.len() as f64);
    let mut chart = ChartBuilder::on(area)
        .caption(fitting(title, 48), text_style(14))
        .margin(8)
        .margin_right(24)
        .x_label_area_size(28)
        .y_label_area_size(NAMES_WIDTH)
        .build_cartesian_2d(0.0..highest(curves), count..0.0)?;
    chart
        .configure_mesh()
        .disable_y_mesh()
        .light_line_style(TRANSPARENT)
        .bold_line_style(GRID)
        .axis_style(GRID)
        .x_labels(5)
        .y_labels(0)
        .x_label_formatter(&percent_label)
        .label_style(text_style(12))
        .draw()?;
    for (number, curve) in curves.iter().enumerate() {
        let lane = 0.1 + 0.8 * (number as f64 + 0.5) / lanes;
        let colour = series(number);
        let whisker = |point: &Estimated| {
            let ends = point.interval.map(|end| (end, point.at + lane));
            PathElement::new(ends.to_vec(), colour.stroke_width(2))
        };
        chart.draw_series(curve.points.iter().map(whisker))?;
        let dot = |point: &Estimated| Circle::new((point.probability, point.at + lane), 4, colour.filled());
        chart.draw_series(curve.points.iter().map(dot))?;
    }
    for (number, level) in levels.iter().enumerate() {
        let (x, y) = chart.backend_coord(&(0.0, number as f64 + 0.5));
        let style = anchored(13, HPos::Right, VPos::Center);
        area.draw(&Text::new(fitting(level, NAME_LENGTH), (x - 8, y), style))?;
        if number > 0 {
            let line = [0.0, highest(curves)].map(|end| (end, number as f64));
            chart.draw_series([PathElement::new(line.to_vec(), GRID)])?;
        }
    }
    Ok(())
}
