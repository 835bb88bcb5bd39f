//! Predicted and observed mix as bars.

use plotters::prelude::*;

use super::{Area, Drawn, GRID, INK, OBSERVED, PREDICTED, percent_label, picture, text_style};

/// Predicted and observed share of one category.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct ShareBar {
    /// Name of the category.
    pub(crate) category: String,
    /// Mean probability.
    pub(crate) predicted: f64,
    /// Observed share.
    pub(crate) observed: f64,
    /// Interval of the observed share.
    pub(crate) interval: [f64; 2],
}

/// Predicted and observed mix as pairs of bars.
pub(crate) fn mix(bars: &[ShareBar]) -> String {
    picture((640, 300), "Predicted and observed mix", |area| draw_mix(area, bars))
}

fn draw_mix(area: &Area, bars: &[ShareBar]) -> Drawn {
    let highest = bars.iter().map(|bar| bar.predicted.max(bar.interval[1])).fold(0.05, f64::max);
    let count = bars.len() as f64;
    let mut chart = ChartBuilder::on(area)
        .margin(8)
        .x_label_area_size(28)
        .y_label_area_size(48)
        .build_cartesian_2d(0.0..count, 0.0..highest * 1.08)?;
    let name =
        |at: &f64| bars.get((at - 0.5).round() as usize).map_or_else(String::new, |b| b.category.clone());
    chart
        .configure_mesh()
        .disable_x_mesh()
        .light_line_style(TRANSPARENT)
        .bold_line_style(GRID)
        .axis_style(GRID)
        .x_labels(0)
        .y_label_formatter(&percent_label)
        .x_label_formatter(&name)
        .label_style(text_style(13))
        .draw()?;
    for (index, bar) in bars.iter().enumerate() {
        let left = index as f64;
        let rectangle = |from: f64, height: f64, colour: RGBColor| {
            Rectangle::new([(left + from, 0.0), (left + from + 0.32, height)], colour.filled())
        };
        let whisker =
            PathElement::new(vec![(left + 0.66, bar.interval[0]), (left + 0.66, bar.interval[1])], INK);
        chart.draw_series([
            rectangle(0.16, bar.predicted, PREDICTED),
            rectangle(0.5, bar.observed, OBSERVED),
        ])?;
        chart.draw_series([whisker])?;
        let style = text_style(13).pos(plotters::style::text_anchor::Pos::new(
            plotters::style::text_anchor::HPos::Center,
            plotters::style::text_anchor::VPos::Top,
        ));
        let (x, y) = chart.backend_coord(&(left + 0.5, 0.0));
        area.draw(&Text::new(bar.category.clone(), (x, y + 8), style))?;
    }
    Ok(())
}
