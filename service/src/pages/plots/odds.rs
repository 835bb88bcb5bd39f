//! Odds ratios with their intervals, on a logarithmic axis.

use plotters::prelude::*;
use plotters::style::text_anchor::{HPos, VPos};

use super::{Area, Drawn, GRID, INK, OBSERVED, anchored, fitting, picture, text_style};

/// Height of a row.
const ROW: u32 = 22;
/// Room for the names of the terms at the left.
const NAMES_WIDTH: u32 = 200;
/// Characters of a name that fit.
const NAME_LENGTH: usize = 28;
/// Odds ratios beyond this are drawn at the edge.
const LARGEST: f64 = 1e4;

/// One odds ratio.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct OddsRatio {
    /// The term.
    pub(crate) term: String,
    /// The ratio.
    pub(crate) ratio: f64,
    /// Its interval.
    pub(crate) interval: [f64; 2],
}

/// Odds ratios from top to bottom; the line is at 1, where a term changes nothing.
pub(crate) fn odds_ratios(title: &str, ratios: &[OddsRatio]) -> String {
    let label = format!("Odds ratios of {title}");
    picture((640, 70 + ROW * ratios.len() as u32), &label, |area| draw(area, title, ratios))
}

fn draw(area: &Area, title: &str, ratios: &[OddsRatio]) -> Drawn {
    let place = |ratio: f64| ratio.clamp(LARGEST.recip(), LARGEST).ln();
    let ends = ratios.iter().flat_map(|ratio| ratio.interval).map(place);
    let furthest = ends.map(f64::abs).fold(0.2, f64::max) * 1.05;
    let count = ratios.len() as f64;
    let mut chart = ChartBuilder::on(area)
        .caption(fitting(title, 60), text_style(14))
        .margin(8)
        .margin_right(20)
        .x_label_area_size(28)
        .y_label_area_size(NAMES_WIDTH)
        .build_cartesian_2d(-furthest..furthest, count..0.0)?;
    for ratio in marks(furthest) {
        let colour = if ratio == 1.0 { INK } else { GRID };
        let line = [0.0, count].map(|end| (ratio.ln(), end));
        chart.draw_series([PathElement::new(line.to_vec(), colour)])?;
        let (x, y) = chart.backend_coord(&(ratio.ln(), count));
        let style = anchored(12, HPos::Center, VPos::Top);
        area.draw(&Text::new(ratio.to_string(), (x, y + 6), style))?;
    }
    for (number, ratio) in ratios.iter().enumerate() {
        let height = number as f64 + 0.5;
        let ends = ratio.interval.map(|end| (place(end), height));
        chart.draw_series([PathElement::new(ends.to_vec(), OBSERVED.stroke_width(2))])?;
        chart.draw_series([Circle::new((place(ratio.ratio), height), 4, OBSERVED.filled())])?;
        let (_, y) = chart.backend_coord(&(0.0, height));
        let style = anchored(13, HPos::Right, VPos::Center);
        area.draw(&Text::new(fitting(&ratio.term, NAME_LENGTH), (NAMES_WIDTH as i32, y), style))?;
    }
    Ok(())
}

/// Round ratios within a distance of 1 on the logarithmic scale, fewer the further the axis goes.
fn marks(furthest: f64) -> impl Iterator<Item = f64> {
    let ratios: &[f64] = match furthest {
        f if f < 0.5 => &[0.7, 0.8, 0.9, 1.0, 1.1, 1.2, 1.4],
        f if f < 1.2 => &[0.4, 0.5, 0.6, 0.8, 1.0, 1.25, 1.5, 2.0, 3.0],
        f if f < 3.0 => &[0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0],
        _ => &[0.0001, 0.001, 0.01, 0.1, 1.0, 10.0, 100.0, 1000.0, 10_000.0],
    };
    ratios.iter().copied().filter(move |ratio| ratio.ln().abs() <= furthest)
}
