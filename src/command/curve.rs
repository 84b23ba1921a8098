//! The operating curves of `design`: as rows, or as a drawing of its own kind.
//!
//! The drawing is one SVG with nothing fetched from elsewhere: dark ink on light paper, so that it
//! can be printed. It never replaces a file.

use std::fmt::Write as _;
use std::fs::File;
use std::io::Write as _;
use std::path::Path;

use super::Failure;
use super::design::{Curve, Numbers, Worth};
use crate::config::quantity::{format_duration, format_frequency};
use crate::proof::radiometer::{Radiometer, Signal, decibels, linear};

/// Steps along a curve.
const STEPS: usize = 160;

/// A point: place along the curve (dB over the floor), its probability, and that of the second
/// curve where there is one.
pub(super) struct Point {
    x_db: f64,
    probability: f64,
    second: Option<f64>,
}

/// The points of a curve, around the place where the detector works.
pub(super) fn points(which: Curve, detector: &Radiometer, worth: &Worth) -> Vec<Point> {
    let looks = worth.looks;
    let along = |low: f64, high: f64| {
        (0..=STEPS).map(move |step| low + (high - low) * step as f64 / STEPS as f64)
    };
    match which {
        Curve::Pd => {
            let pd = |db: f64, signal| detector.pd_at(looks, linear(db), signal);
            let noise_like = |db: f64| pd(db, Signal::NoiseLike).expect("has a closed form");
            let middle_db = worth.sensitivity_over_floor_db.round();
            // Up to where next to nothing is missed; few looks of a signal like noise take far.
            let full = (1..20).find(|up| noise_like(middle_db + f64::from(*up)) > 0.999);
            let high_db = middle_db + f64::from(full.unwrap_or(20));
            along(middle_db - 10.0, high_db)
                .map(|x_db| Point {
                    x_db,
                    probability: noise_like(x_db),
                    second: pd(x_db, Signal::ConstantEnvelope),
                })
                .collect()
        }
        Curve::Pfa => {
            let threshold_db = |pfa: f64| {
                let detector = Radiometer { pfa, ..detector.clone() };
                decibels(detector.threshold(looks))
            };
            let nominal = Radiometer { uncertainty_db: 0.0, ..detector.clone() };
            let deepest = (1e-2 * detector.pfa).clamp(1e-10, 1e-6);
            along(threshold_db(0.9), threshold_db(deepest))
                .map(|x_db| Point {
                    x_db,
                    probability: detector.pfa_at(looks, linear(x_db)),
                    second: (detector.uncertainty_db > 0.0)
                        .then(|| nominal.pfa_at(looks, linear(x_db))),
                })
                .collect()
        }
    }
}

/// The curve as rows: a heading, then a line a point. What has no closed form is empty.
pub(super) fn rows(which: Curve, numbers: &Numbers, points: &[Point]) -> String {
    let unit = numbers.level_ref.to_lowercase();
    let mut text = match which {
        Curve::Pd => format!("snr_db,signal_{unit},pd_noise_like,pd_constant_envelope\n"),
        Curve::Pfa => format!("threshold_over_floor_db,threshold_{unit},pfa,pfa_nominal_noise\n"),
    };
    for point in points {
        let second = point.second.map(|value| format!("{value:.6e}")).unwrap_or_default();
        let level_db = numbers.floor_db + point.x_db;
        writeln!(text, "{:.4},{level_db:.4},{:.6e},{second}", point.x_db, point.probability)
            .expect("a String takes all that is written to it");
    }
    text
}

/// Writes a new file.
pub(super) fn write_new(path: &Path, text: &str) -> Result<(), Failure> {
    let unwritable = |error: std::io::Error| {
        let name = path.display();
        let line = match error.kind() {
            std::io::ErrorKind::AlreadyExists => {
                format!("{name}: is there already; name a new file for --svg")
            }
            _ => format!("{name}: cannot be written: {error}"),
        };
        Failure::new(Failure::WRITE, line)
    };
    let mut file = File::create_new(path).map_err(unwritable)?;
    file.write_all(text.as_bytes()).map_err(unwritable)
}

const WIDTH: f64 = 800.0;
const HEIGHT: f64 = 520.0;
/// The field of the curve: left, top, right, bottom.
const FIELD: (f64, f64, f64, f64) = (86.0, 104.0, 764.0, 448.0);

/// Fits values to the field.
struct Axes {
    low_db: f64,
    high_db: f64,
    /// Decades of a logarithmic probability below 1; `None` for a linear one.
    decades: Option<f64>,
}

impl Axes {
    fn x(&self, db: f64) -> f64 {
        FIELD.0 + (FIELD.2 - FIELD.0) * (db - self.low_db) / (self.high_db - self.low_db)
    }

    fn y(&self, probability: f64) -> f64 {
        let share = match self.decades {
            Some(decades) => 1.0 + probability.log10() / decades,
            None => probability,
        };
        FIELD.3 - (FIELD.3 - FIELD.1) * share.clamp(0.0, 1.0)
    }

    /// Marks along the bottom: about eight round values, and their decimals.
    fn marks_db(&self) -> (Vec<f64>, usize) {
        let steps = [0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0];
        let span_db = self.high_db - self.low_db;
        let step = steps.into_iter().find(|step| span_db / step <= 9.0).unwrap_or(20.0);
        let decimals = if step < 0.1 { 2 } else { usize::from(step < 1.0) };
        let (first, last) = (self.low_db / step - 1e-6, self.high_db / step + 1e-6);
        let marks = (first.ceil() as i64..=last.floor() as i64).map(|mark| mark as f64 * step);
        (marks.collect(), decimals)
    }

    /// Marks along the side, each with its words.
    fn marks(&self) -> Vec<(f64, String)> {
        match self.decades {
            Some(decades) => {
                let power = |exponent: i32| match exponent {
                    0 => "1".to_owned(),
                    _ => format!("10<tspan dy=\"-5\" font-size=\"10\">\u{2212}{exponent}</tspan>"),
                };
                (0..=decades as i32).map(|down| (10f64.powi(-down), power(down))).collect()
            }
            None => (0..=5)
                .map(|fifth| {
                    let value = f64::from(fifth) / 5.0;
                    (value, format!("{value:.1}"))
                })
                .collect(),
        }
    }

    fn path(&self, points: impl Iterator<Item = (f64, f64)>) -> String {
        let mut path = String::new();
        for (index, (db, probability)) in points.enumerate() {
            let letter = if index == 0 { 'M' } else { 'L' };
            let (x, y) = (self.x(db), self.y(probability));
            write!(path, "{letter}{x:.1} {y:.1}").expect("a String takes all");
        }
        path
    }
}

/// The curve as a drawing.
pub(super) fn drawing(which: Curve, numbers: &Numbers, worth: &Worth, points: &[Point]) -> String {
    let deepest = points.iter().map(|point| point.probability).fold(1.0, f64::min);
    let axes = Axes {
        low_db: points[0].x_db,
        high_db: points[points.len() - 1].x_db,
        decades: (which == Curve::Pfa).then(|| (-deepest.log10() - 1e-6).ceil().max(1.0)),
    };
    let mut svg = head(which, numbers, worth);
    grid(&mut svg, &axes);
    let (left, top, right, bottom) = FIELD;
    let (title_x, title_y, first, second) = match which {
        Curve::Pd => (
            "SNR in the channel (dB)",
            "probability of detection",
            "noise-like",
            "constant envelope",
        ),
        Curve::Pfa => (
            "threshold over the floor (dB)",
            "probability of a false alarm",
            "at the highest noise",
            "at the nominal noise",
        ),
    };
    let both = points[0].second.is_some();
    if both {
        let path = axes.path(
            points
                .iter()
                .filter_map(|p| Some((p.x_db, p.second?)))
                // It ends where it leaves the field.
                .filter(|(_, second)| axes.decades.is_none_or(|d| second.log10() >= -d)),
        );
        line(&mut svg, format_args!("<path class=\"second\" d=\"{path}\"/>"));
    }
    let path = axes.path(points.iter().map(|p| (p.x_db, p.probability)));
    line(&mut svg, format_args!("<path class=\"first\" d=\"{path}\"/>"));
    working_point(&mut svg, which, numbers, worth, &axes);
    if both {
        legend(&mut svg, first, second);
    }
    let middle = 0.5 * (left + right);
    line(&mut svg, format_args!("<text class=\"title\" x=\"{middle}\" y=\"494\">{title_x}</text>"));
    let middle = 0.5 * (top + bottom);
    line(
        &mut svg,
        format_args!(
            "<text class=\"title\" transform=\"translate(26 {middle}) rotate(-90)\">{title_y}\
             </text>"
        ),
    );
    svg.push_str("</svg>\n");
    svg
}

fn line(svg: &mut String, text: std::fmt::Arguments<'_>) {
    writeln!(svg, "{text}").expect("a String takes all that is written to it");
}

fn head(which: Curve, numbers: &Numbers, worth: &Worth) -> String {
    let style = "\
text { font: 13px 'Source Sans 3', 'Helvetica Neue', Arial, sans-serif; fill: #23303a }
.head { font-size: 20px; font-weight: 600 }
.under { fill: #5b6870 }
.mark { fill: #46535b; font-size: 12px }
.title { text-anchor: middle; fill: #46535b }
.grid { stroke: #dfdccf; stroke-width: 1 }
.axis { stroke: #23303a; stroke-width: 1.2 }
.first { fill: none; stroke: #23303a; stroke-width: 2.4; stroke-linejoin: round }
.second { fill: none; stroke: #23303a; stroke-width: 1.6; stroke-dasharray: 6 4 }
.works { fill: none; stroke: #a8481f; stroke-width: 1.2 }
.dot { fill: #a8481f; stroke: #fbfaf5; stroke-width: 2 }
.told { fill: #a8481f; font-weight: 600 }";
    let title = match which {
        Curve::Pd => "Detection against signal",
        Curve::Pfa => "False alarms against threshold",
    };
    let known = match numbers.reference_cells {
        Some(cells) => format!("floor estimated from {cells} idle channels"),
        None => "floor known".to_owned(),
    };
    let off = match numbers.noise_uncertainty_db {
        0.0 => String::new(),
        off_db => format!(" to within {off_db} dB either way"),
    };
    let facts = format!(
        "{} channel, dwell {} ({:.0} independent looks), Pfa {:e}, Pd {}, {known}{off}",
        format_frequency(numbers.bandwidth_hz),
        format_duration((worth.dwell_s * 1e6).round() / 1e6),
        worth.looks.floor(),
        numbers.pfa,
        numbers.pd
    );
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {HEIGHT}\" \
         width=\"{WIDTH}\" height=\"{HEIGHT}\" role=\"img\" aria-label=\"{title}\">\n\
         <style>\n{style}\n</style>\n\
         <rect width=\"{WIDTH}\" height=\"{HEIGHT}\" fill=\"#fbfaf5\"/>\n\
         <text class=\"head\" x=\"86\" y=\"42\">{title}</text>\n\
         <text class=\"under\" x=\"86\" y=\"66\">{facts}</text>\n"
    )
}

fn grid(svg: &mut String, axes: &Axes) {
    let (left, top, right, bottom) = FIELD;
    let (marks_db, decimals) = axes.marks_db();
    for db in marks_db {
        let x = axes.x(db);
        line(svg, format_args!("<path class=\"grid\" d=\"M{x:.1} {top}V{bottom}\"/>"));
        // A true minus, as wide as the plus that it stands for.
        let told = format!("{:.decimals$}", db + 0.0).replace('-', "\u{2212}");
        let y = bottom + 21.0;
        line(
            svg,
            format_args!(
                "<text class=\"mark\" text-anchor=\"middle\" x=\"{x:.1}\" y=\"{y}\">{told}</text>"
            ),
        );
    }
    for (value, told) in axes.marks() {
        let y = axes.y(value);
        line(svg, format_args!("<path class=\"grid\" d=\"M{left} {y:.1}H{right}\"/>"));
        let (x, y) = (left - 10.0, y + 4.0);
        line(
            svg,
            format_args!(
                "<text class=\"mark\" text-anchor=\"end\" x=\"{x}\" y=\"{y:.1}\">{told}</text>"
            ),
        );
    }
    line(svg, format_args!("<path class=\"axis\" d=\"M{left} {bottom}H{right}\"/>"));
}

/// Where the detector works: hairlines to both axes, and the values.
fn working_point(svg: &mut String, which: Curve, numbers: &Numbers, worth: &Worth, axes: &Axes) {
    let (db, probability, told) = match which {
        Curve::Pd => (
            worth.sensitivity_over_floor_db,
            numbers.pd,
            format!(
                "sensitivity {:.1} {}, Pd {}",
                worth.sensitivity_db, numbers.level_ref, numbers.pd
            ),
        ),
        Curve::Pfa => (
            worth.threshold_over_floor_db,
            numbers.pfa,
            format!("threshold {:.2} dB, Pfa {:e}", worth.threshold_over_floor_db, numbers.pfa),
        ),
    };
    let (left, bottom) = (FIELD.0, FIELD.3);
    let (x, y) = (axes.x(db), axes.y(probability));
    line(svg, format_args!("<path class=\"works\" d=\"M{left} {y:.1}H{x:.1}V{bottom}\"/>"));
    line(svg, format_args!("<circle class=\"dot\" cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"5.5\"/>"));
    let told = told.replace('-', "\u{2212}");
    // Above the hairline at its left end, where neither curve comes near.
    let (x, y) = (left + 10.0, y - 8.0);
    line(svg, format_args!("<text class=\"told\" x=\"{x}\" y=\"{y:.1}\">{told}</text>"));
}

/// What the two lines are, in the band between the facts and the field.
fn legend(svg: &mut String, first: &str, second: &str) {
    let mut x = FIELD.0;
    for (class, told) in [("first", first), ("second", second)] {
        let (end, text) = (x + 30.0, x + 38.0);
        line(svg, format_args!("<path class=\"{class}\" d=\"M{x} 86H{end}\"/>"));
        line(svg, format_args!("<text class=\"mark\" x=\"{text}\" y=\"90\">{told}</text>"));
        x += 190.0;
    }
}
