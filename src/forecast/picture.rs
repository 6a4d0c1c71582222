//! A forecast as a picture: SVG with real text, readable in greyscale.

use std::ops::Range;

use plotters::{
    coord::{
        combinators::{BindKeyPoints, IntoLogRange},
        ranged1d::{AsRangedCoord, ValueFormatter},
    },
    prelude::*,
    style::text_anchor::{HPos, Pos, VPos},
};

use super::{
    Curve, Forecast, Kind, Point, Spacing, Swept,
    figure::{figure, power_of_ten},
};
use crate::{
    certificate::{Reason, Verdict},
    relaxation::level::Level,
    request::{EntropyChoice, RoundModel},
    scenario::{LeakageDocument, LeakageReading},
};

/// Why there is no picture.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("the picture cannot be drawn: {0}")]
pub struct PictureError(String);

type Canvas<'a> = DrawingArea<SVGBackend<'a>, plotters::coord::Shift>;

const WIDTH: u32 = 900;
const PLOT_HEIGHT: u32 = 520;
const LINE_HEIGHT: u32 = 24;
const TITLE_HEIGHT: u32 = 64;
/// Markers on a curve; all of its points would hide the line.
const MARKERS: usize = 9;
/// What the curves of each entropy look like: colours that differ in lightness too, and filled or open markers.
const GUESSING: RGBColor = RGBColor(16, 62, 120);
const POWER: RGBColor = RGBColor(206, 92, 24);

/// How much of its colour fills what is between a curve and the attacks on it, and half the width of the tick at an attack.
const BETWEEN: f64 = 0.25;
const TICK: i32 = 5;

/// Dash, gap and marker of a curve.
struct Style {
    colour: RGBColor,
    /// Pixels on, pixels off; a solid line has no gap.
    dash: (u32, u32),
    marker: Marker,
    filled: bool,
}

#[derive(Clone, Copy)]
enum Marker {
    Circle,
    Square,
    Triangle,
}

impl Style {
    fn of(kind: Kind) -> Self {
        let (dash, marker) = match kind.rounds {
            RoundModel::PlugIn => ((1, 0), Marker::Circle),
            RoundModel::Independent => ((9, 5), Marker::Square),
            RoundModel::Memory => ((3, 4), Marker::Triangle),
        };
        match kind.entropy {
            EntropyChoice::Guessing => Self { colour: GUESSING, dash, marker, filled: true },
            EntropyChoice::Auto | EntropyChoice::Power => Self { colour: POWER, dash, marker, filled: false },
        }
    }

    fn line(&self) -> ShapeStyle {
        self.colour.stroke_width(2)
    }

    /// A marker around the origin, as closed lines.
    fn outline(&self) -> Vec<(i32, i32)> {
        match self.marker {
            Marker::Circle => (0..=16)
                .map(|i| f64::from(i) * std::f64::consts::PI / 8.0)
                .map(|a| ((4.4 * a.cos()).round() as i32, (4.4 * a.sin()).round() as i32))
                .collect(),
            Marker::Square => vec![(-4, -4), (4, -4), (4, 4), (-4, 4), (-4, -4)],
            Marker::Triangle => vec![(0, -5), (5, 4), (-5, 4), (0, -5)],
        }
    }
}

/// Draws a forecast: bits per target round over what is varied, one curve for each account, thresholds marked on the axis.
///
/// # Errors
/// The plotting library's.
pub fn picture(forecast: &Forecast) -> Result<String, PictureError> {
    let mut svg = String::new();
    let rows = forecast.curves.len() as u32;
    let rows = rows + u32::from(is_bracketed(forecast));
    let height = TITLE_HEIGHT + PLOT_HEIGHT + LINE_HEIGHT * (rows + 2);
    let failed = |error: DrawingAreaErrorKind<_>| PictureError(error.to_string());
    {
        let canvas = SVGBackend::with_string(&mut svg, (WIDTH, height)).into_drawing_area();
        canvas.fill(&WHITE).map_err(failed)?;
        let (title, rest) = canvas.split_vertically(TITLE_HEIGHT);
        let (plot, legend) = rest.split_vertically(PLOT_HEIGHT);
        draw_title(forecast, &title).map_err(failed)?;
        let range = ends(forecast);
        match forecast.spacing {
            Spacing::Logarithmic => {
                let (bold, light) = decades(&range);
                let axis = range.clone().log_scale().with_key_points(bold).with_light_points(light);
                draw_plot(forecast, &plot, axis)
            }
            Spacing::Linear => draw_plot(forecast, &plot, range),
        }
        .map_err(failed)?;
        draw_legend(forecast, &legend).map_err(failed)?;
        canvas.present().map_err(failed)?;
    }
    Ok(svg)
}

type Drawn = Result<(), DrawingAreaErrorKind<std::io::Error>>;

fn font(size: u32) -> TextStyle<'static> {
    ("sans-serif", size).into_font().color(&BLACK)
}

fn draw_title(forecast: &Forecast, area: &Canvas) -> Drawn {
    let geometry = forecast.scenario.geometry();
    let title = format!("Certified bits per target round over {}", forecast.swept.name());
    let reading = match forecast.scenario.leakage_holds() {
        LeakageReading::OnAverage => "leakage on average",
        LeakageReading::EveryEmission => "leakage of every emission",
    };
    let first = forecast.curves.first().and_then(|curve| curve.points.first());
    let mut fixed = vec![
        format!(
            "{} preparations, {} measurements, {} outcomes, carrier dimension {}",
            geometry.preparations, geometry.measurements, geometry.outcomes, geometry.carrier_dimension
        ),
        reading.to_owned(),
    ];
    if let Some(point) = first {
        if forecast.swept != Swept::Leakage
            && let Some(leakage) = point.value(Swept::Leakage)
        {
            fixed.push(format!("ε = {}", figure(leakage)));
        }
        if forecast.swept != Swept::Visibility && point.visibility < 1.0 {
            fixed.push(format!("visibility {}", figure(point.visibility)));
        }
    }
    area.draw(&Text::new(title, (70, 12), font(20)))?;
    area.draw(&Text::new(fixed.join("; "), (70, 40), font(14)))
}

fn draw_plot<X>(forecast: &Forecast, area: &Canvas, axis: X) -> Drawn
where
    X: AsRangedCoord<Value = f64>,
    X::CoordDescType: ValueFormatter<f64>,
{
    let shown = |point: &Point| point.bracket.map_or(point.bits_per_target_round, |bracket| bracket.attack.max(bracket.bound));
    let most = forecast.curves.iter().flat_map(|curve| &curve.points).map(shown).fold(0.0, f64::max);
    let top = if most > 0.0 { most * 1.08 } else { 1.0 };
    let mut chart = ChartBuilder::on(area)
        .margin_right(30)
        .margin_left(10)
        .x_label_area_size(58)
        .y_label_area_size(64)
        .build_cartesian_2d(axis, 0.0..top)?;
    // Labels lie a tenth of the range apart, or a little more.
    let decimals = usize::try_from((-(top / 10.0).log10()).ceil() as i64).unwrap_or(0);
    let described = match forecast.swept {
        Swept::Leakage => "leakage ε (weight outside the carrier)",
        Swept::Visibility => "visibility (weight of the expected behaviour against white noise)",
        Swept::Rounds => "rounds of a batch, all settings",
    };
    chart
        .configure_mesh()
        .x_desc(described)
        .y_desc("bits per target round")
        .x_label_formatter(&|x| if forecast.spacing == Spacing::Logarithmic { power_of_ten(*x) } else { figure(*x) })
        .y_label_formatter(&|y| format!("{y:.decimals$}"))
        .y_max_light_lines(4)
        .axis_desc_style(font(16))
        .label_style(font(14))
        .bold_line_style(BLACK.mix(0.18))
        .light_line_style(BLACK.mix(0.06))
        .draw()?;
    for curve in &forecast.curves {
        let colour = Style::of(curve.kind).colour;
        for run in brackets(curve, forecast.swept) {
            let above = run.iter().map(|between| (between.x, between.attack));
            let below = run.iter().rev().map(|between| (between.x, between.bound));
            chart.draw_series([Polygon::new(above.chain(below).collect::<Vec<_>>(), colour.mix(BETWEEN))])?;
            for between in run.iter().filter(|between| between.attacked) {
                let (x, y) = chart.backend_coord(&(between.x, between.attack));
                let (left, top) = area.get_base_pixel();
                area.draw(&PathElement::new([(x - left - TICK, y - top), (x - left + TICK, y - top)], colour.stroke_width(2)))?;
            }
        }
    }
    for curve in &forecast.curves {
        let style = Style::of(curve.kind);
        for run in runs(curve, forecast.swept) {
            if style.dash.1 == 0 {
                chart.draw_series(LineSeries::new(run.iter().copied(), style.line()))?;
            } else {
                chart.draw_series(DashedLineSeries::new(run.iter().copied(), style.dash.0, style.dash.1, style.line()))?;
            }
        }
        let shown: Vec<(f64, f64)> = runs(curve, forecast.swept).into_iter().flatten().collect();
        let every = shown.len().div_ceil(MARKERS).max(1);
        for place in shown.iter().skip(every / 2).step_by(every) {
            let pixel = chart.backend_coord(place);
            let (x, y) = area.get_base_pixel();
            draw_marker(area, &style, (pixel.0 - x, pixel.1 - y))?;
        }
    }
    // Thresholds, as pins on the axis.
    for threshold in forecast.thresholds.iter().filter(|threshold| threshold.quantity == forecast.swept) {
        let Some(x) = threshold.certifies_at.filter(|x| ends(forecast).contains(x)) else { continue };
        let style = Style::of(threshold.kind);
        chart.draw_series(LineSeries::new([(x, 0.0), (x, 0.06 * top)], style.colour.stroke_width(2)))?;
        let pixel = chart.backend_coord(&(x, 0.06 * top));
        let (left, above) = area.get_base_pixel();
        draw_marker(area, &style, (pixel.0 - left, pixel.1 - above))?;
    }
    Ok(())
}

fn draw_marker(area: &Canvas, style: &Style, at: (i32, i32)) -> Drawn {
    let outline: Vec<(i32, i32)> = style.outline().into_iter().map(|(x, y)| (at.0 + x, at.1 + y)).collect();
    let inside = if style.filled { style.colour } else { WHITE };
    area.draw(&Polygon::new(outline.clone(), inside))?;
    area.draw(&PathElement::new(outline, style.colour.stroke_width(2)))
}

fn draw_legend(forecast: &Forecast, area: &Canvas) -> Drawn {
    for (row, curve) in forecast.curves.iter().enumerate() {
        let y = (LINE_HEIGHT * row as u32 + LINE_HEIGHT / 2) as i32;
        let style = Style::of(curve.kind);
        let (on, off) = (style.dash.0 as i32, style.dash.1 as i32);
        let length = 56;
        if off == 0 {
            area.draw(&PathElement::new([(84, y), (84 + length, y)], style.line()))?;
        } else {
            for start in (84..84 + length).step_by((on + off) as usize) {
                area.draw(&PathElement::new([(start, y), ((start + on).min(84 + length), y)], style.line()))?;
            }
        }
        draw_marker(area, &style, (84 + length / 2, y))?;
        let label = font(14).pos(Pos::new(HPos::Left, VPos::Center));
        area.draw(&Text::new(label_of(forecast, curve), (154, y), label))?;
    }
    let mut last = (LINE_HEIGHT * forecast.curves.len() as u32) as i32;
    if is_bracketed(forecast) {
        let y = last + (LINE_HEIGHT / 2) as i32;
        area.draw(&Rectangle::new([(84, y - 6), (140, y + 6)], BLACK.mix(BETWEEN).filled()))?;
        area.draw(&PathElement::new([(112 - TICK, y - 6), (112 + TICK, y - 6)], BLACK.stroke_width(2)))?;
        let label = font(14).pos(Pos::new(HPos::Left, VPos::Center));
        let words = "what an explicit attack leaves of this entropy, at the ticks: no bound on it can be higher";
        area.draw(&Text::new(words, (154, y), label))?;
        last += LINE_HEIGHT as i32;
    }
    let note = "A forecast from an expected behaviour, not from data: nothing may be released on it.";
    let level = format!("Every figure follows from witnesses that were checked exactly; relaxation level {}.", level_name(forecast));
    area.draw(&Text::new(level, (84, last + 8), font(12)))?;
    area.draw(&Text::new(note, (84, last + 26), font(12)))
}

fn level_name(forecast: &Forecast) -> &'static str {
    match forecast.level {
        Level::Sparse => "sparse",
        Level::Lean => "lean",
        Level::Standard => "standard",
        Level::Sharp => "sharp",
        Level::Keen => "keen",
    }
}

/// What a curve shows, and up to where.
fn label_of(forecast: &Forecast, curve: &Curve) -> String {
    let mut label = curve.kind.in_words(forecast.swept, curve.points.first().and_then(|point| point.total_rounds));
    let threshold = forecast.thresholds.iter().find(|threshold| threshold.kind == curve.kind && threshold.quantity == forecast.swept);
    if let Some((certifies, threshold)) = threshold.and_then(|threshold| Some((threshold.certifies_at?, threshold))) {
        let (preposition, other) = match threshold.quantity {
            Swept::Leakage => ("up to", "not at"),
            Swept::Visibility | Swept::Rounds => ("from", "not at"),
        };
        label += &format!("; certifies {preposition} {}", figure(certifies));
        if let Some(not) = threshold.not_certified_at {
            label += &format!(", {other} {}", figure(not));
        }
    }
    label
}

impl Kind {
    /// What a curve of this kind shows.
    pub fn in_words(self, swept: Swept, rounds: Option<u64>) -> String {
        let entropy = match self.entropy {
            EntropyChoice::Guessing => "min-entropy",
            EntropyChoice::Auto | EntropyChoice::Power => "power entropy",
        };
        let number = match rounds {
            Some(rounds) if swept != Swept::Rounds => format!("{} ", figure(rounds as f64)),
            _ => String::new(),
        };
        match self.rounds {
            RoundModel::PlugIn if self.entropy == EntropyChoice::Power => "Shannon entropy, limit of many rounds".to_owned(),
            RoundModel::PlugIn => format!("{entropy}, limit of many rounds"),
            RoundModel::Independent => format!("{entropy}, {number}independent rounds"),
            RoundModel::Memory => format!("{entropy}, {number}rounds with memory"),
        }
    }
}

impl Point {
    /// The value of a quantity here; `None` for a leakage that differs from preparation to preparation, and for no number of rounds.
    pub fn value(&self, quantity: Swept) -> Option<f64> {
        match (quantity, &self.leakage) {
            (Swept::Leakage, LeakageDocument::Uniform(value)) => Some(*value),
            (Swept::Leakage, LeakageDocument::PerPreparation(_) | LeakageDocument::Budget(_) | LeakageDocument::Stored(_)) => None,
            (Swept::Visibility, _) => Some(self.visibility),
            (Swept::Rounds, _) => self.total_rounds.map(|rounds| rounds as f64),
        }
    }
}

fn is_bracketed(forecast: &Forecast) -> bool {
    forecast.curves.iter().flat_map(|curve| &curve.points).any(|point| point.bracket.is_some())
}

/// What is between a curve and the attacks on it, at one point.
struct Between {
    x: f64,
    bound: f64,
    attack: f64,
    /// If not, the distance is interpolated.
    attacked: bool,
}

/// The brackets of a curve, from attack to attack, without gaps.
fn brackets(curve: &Curve, swept: Swept) -> Vec<Vec<Between>> {
    let attacked: Vec<usize> = (0..curve.points.len()).filter(|i| curve.points[*i].bracket.is_some()).collect();
    let gap = |i: usize| curve.points[i].bracket.map_or(0.0, |bracket| bracket.attack - bracket.bound);
    let mut runs: Vec<Vec<Between>> = vec![];
    for pair in attacked.windows(2) {
        let &[first, last] = pair else { continue };
        let span = &curve.points[first..=last];
        if span.iter().any(|point| point.reason == Some(Reason::OutsideModel) || point.reason == Some(Reason::Unverified)) {
            continue;
        }
        let between = |(i, point): (usize, &Point)| {
            let share = i as f64 / (last - first) as f64;
            let bound = point.bits_per_target_round;
            let attack = bound + (1.0 - share) * gap(first) + share * gap(last);
            Some(Between { x: point.value(swept)?, bound, attack, attacked: point.bracket.is_some() })
        };
        runs.push(span.iter().enumerate().filter_map(between).collect());
    }
    runs
}

/// The points of a curve, without gaps: what is outside the model or was not verified interrupts it.
fn runs(curve: &Curve, swept: Swept) -> Vec<Vec<(f64, f64)>> {
    let mut runs = vec![vec![]];
    for point in &curve.points {
        let shown = point.verdict != Verdict::Refused || point.reason == Some(Reason::ZeroBound);
        match (point.value(swept), runs.last_mut()) {
            (Some(x), Some(run)) if shown => run.push((x, point.bits_per_target_round)),
            (_, Some(run)) if !run.is_empty() => runs.push(vec![]),
            _ => {}
        }
    }
    runs.retain(|run| !run.is_empty());
    runs
}

/// The first and the last value of the grid.
fn ends(forecast: &Forecast) -> Range<f64> {
    let values = || forecast.curves.iter().flat_map(|curve| &curve.points).filter_map(|point| point.value(forecast.swept));
    let (low, high) = values().fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), value| (low.min(value), high.max(value)));
    if low < high { low..high } else { 0.5..1.5 }
}

/// Powers of ten within the range, and their multiples. Where there are fewer than two powers, multiples are labelled as well.
fn decades(range: &Range<f64>) -> (Vec<f64>, Vec<f64>) {
    let exponents = (range.start.log10().floor() as i32)..=(range.end.log10().ceil() as i32);
    let within = |value: &f64| *value >= range.start * (1.0 - 1e-9) && *value <= range.end * (1.0 + 1e-9);
    let times = |factors: &[f64]| -> Vec<f64> {
        exponents.clone().flat_map(|exponent| factors.iter().map(move |factor| factor * 10f64.powi(exponent))).filter(within).collect()
    };
    let (powers, light) = (times(&[1.0]), times(&[2.0, 3.0, 4.0, 5.0, 6.0, 7.0, 8.0, 9.0]));
    if powers.len() >= 2 { (powers, light) } else { (times(&[1.0, 2.0, 5.0]), light) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_axis_of_less_than_two_decades_has_labels_too() {
        assert_eq!(decades(&(1e-5..1e-1)).0.len(), 5);
        assert_eq!(decades(&(2e-3..9e-3)).0, [2e-3, 5e-3]);
    }
}
