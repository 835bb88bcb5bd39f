//! Pictures of a page, drawn by `plotters` as SVG that takes its colours from the page.
//!
//! `plotters` knows fixed colours only. Each picture is drawn in marker colours, which are then
//! replaced by the page's own, so that one picture serves light, dark and print.

mod calibration;
mod curves;
mod mix;
mod odds;

use plotters::coord::Shift;
use plotters::prelude::*;
use plotters::style::text_anchor::{HPos, Pos, VPos};

pub(crate) use calibration::{CurvePoint, calibration};
pub(crate) use curves::{CategoryCurve, Estimated, along_levels, along_number};
pub(crate) use mix::{ShareBar, mix};
pub(crate) use odds::{OddsRatio, odds_ratios};

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
/// Colours for categories; further categories begin again.
pub(crate) const SERIES: usize = 8;

type Area<'a> = DrawingArea<SVGBackend<'a>, Shift>;
type Drawn = Result<(), DrawingAreaErrorKind<std::io::Error>>;

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
    for number in 0..SERIES {
        svg = svg.replace(&marker_of(number), &format!("var(--series-{number})"));
    }
    let label = label.replace('&', "&amp;").replace('"', "&quot;").replace('<', "&lt;");
    let fixed_size = format!("<svg width=\"{}\" height=\"{}\"", size.0, size.1);
    svg.replacen(&fixed_size, &format!("<svg role=\"img\" aria-label=\"{label}\""), 1)
}

/// The marker colour of a series.
fn series(number: usize) -> RGBColor {
    RGBColor(0, 1, (number % SERIES) as u8)
}

/// The same as it stands in the SVG.
fn marker_of(number: usize) -> String {
    format!("#0001{number:02X}")
}

// plotters hands its formatters references.
#[expect(clippy::trivially_copy_pass_by_ref)]
fn percent_label(share: &f64) -> String {
    format!("{:.0} %", share * 100.0)
}

/// A style for texts that are placed by hand.
fn anchored(size: i32, horizontal: HPos, vertical: VPos) -> TextStyle<'static> {
    text_style(size).pos(Pos::new(horizontal, vertical))
}

/// A text cut to a number of characters, so that it does not run out of its place.
fn fitting(text: &str, most: usize) -> String {
    if text.chars().count() <= most {
        return text.to_owned();
    }
    text.chars().take(most - 1).chain(['…']).collect()
}

fn text_style(size: i32) -> TextStyle<'static> {
    ("sans-serif", size).into_font().color(&INK)
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
