//! Pictures of a page, drawn by `plotters` as SVG that takes its colours from the page.
//!
//! `plotters` knows fixed colours only. Each picture is drawn in marker colours, which are then
//! replaced by the page's own, so that one picture serves light, dark and print.

use plotters::coord::Shift;
use plotters::prelude::*;

/// Marker colours and what the page puts in their place.
const INK: RGBColor = RGBColor(0, 0, 1);
const GRID: RGBColor = RGBColor(0, 0, 2);
const PREDICTED: RGBColor = RGBColor(0, 0, 3);
const OBSERVED: RGBColor = RGBColor(0, 0, 4);
const REPLACEMENTS: [(&str, &str); 4] = [
    ("#000001", "var(--ink)"),
    ("#000002", "var(--grid)"),
    ("#000003", "var(--predicted)"),
    ("#000004", "var(--observed)"),
];

type Area<'a> = DrawingArea<SVGBackend<'a>, Shift>;
type Drawn = Result<(), DrawingAreaErrorKind<std::io::Error>>;

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

/// Predicted and observed mix as pairs of bars.
pub(crate) fn mix(bars: &[ShareBar]) -> String {
    picture((640, 300), "Predicted and observed mix", |area| draw_mix(area, bars))
}

/// Calibration of one category: observed share against mean probability, with intervals.
pub(crate) fn calibration(category: &str, points: &[CurvePoint]) -> String {
    let label = format!("Calibration of {category}");
    picture((320, 300), &label, |area| draw_calibration(area, category, points))
}

fn picture(size: (u32, u32), label: &str, draw: impl FnOnce(&Area) -> Drawn) -> String {
    let mut svg = String::new();
    let drawn = {
        let area = SVGBackend::with_string(&mut svg, size).into_drawing_area();
        draw(&area).and_then(|()| area.present())
    };
    if let Err(reason) = drawn {
        tracing::error!(%reason, "a picture could not be drawn");
        return String::new();
    }
    for (marker, colour) in REPLACEMENTS {
        svg = svg.replace(marker, colour);
    }
    let label = label.replace('&', "&amp;").replace('"', "&quot;").replace('<', "&lt;");
    let fixed_size = format!("<svg width=\"{}\" height=\"{}\"", size.0, size.1);
    svg.replacen(&fixed_size, &format!("<svg role=\"img\" aria-label=\"{label}\""), 1)
}

fn text_style(size: i32) -> TextStyle<'static> {
    ("sans-serif", size).into_font().color(&INK)
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
        .y_label_formatter(&|share| format!("{:.0} %", share * 100.0))
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
        .x_label_formatter(&|share| format!("{:.0} %", share * 100.0))
        .y_label_formatter(&|share| format!("{:.0} %", share * 100.0))
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

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pictures_take_the_colours_of_the_page_and_keep_markup_as_text() {
        let bar =
            ShareBar { category: "<b>&\"".into(), predicted: 0.3, observed: 0.25, interval: [0.2, 0.3] };
        let svg = mix(&[bar]);
        assert!(svg.contains("var(--predicted)") && svg.contains("var(--observed)"));
        assert!(!svg.contains("#0000") && !svg.contains("<b>"), "{svg}");
        let point = CurvePoint { predicted: 0.2, observed: 0.3, interval: [0.1, 0.5] };
        let svg = calibration("a\"<i>", &[point]);
        assert!(svg.contains("<circle") && !svg.contains("<i>"), "{svg}");
    }
}
