//! A forecast as a plain table for people, and as CSV for programmes.

use serde_json::Value;

use super::{Forecast, Kind, Point, Swept, figure::figure};

/// One row a point, with the columns of the head row; numbers with a point, lines end in CR LF (RFC 4180).
///
/// # Errors
/// The writer's.
pub fn csv(forecast: &Forecast) -> Result<String, csv::Error> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    writer.write_record([
        "rounds",
        "entropy",
        "leakage",
        "visibility",
        "total_rounds",
        "verdict",
        "reason",
        "bits_per_target_round",
        "bits_per_round",
        "certified_bits",
        "solved",
        "loss",
        "attack",
        "attack_residual",
    ])?;
    for curve in &forecast.curves {
        for point in &curve.points {
            let leakage = point.value(Swept::Leakage).map_or_else(|| word(&point.leakage), |leakage| leakage.to_string());
            let number = |value: Option<u64>| value.map_or_else(String::new, |value| value.to_string());
            writer.write_record([
                word(&curve.kind.rounds),
                word(&curve.kind.entropy),
                leakage,
                point.visibility.to_string(),
                number(point.total_rounds),
                word(&point.verdict),
                point.reason.as_ref().map_or_else(String::new, word),
                point.bits_per_target_round.to_string(),
                point.bits_per_round.to_string(),
                number(point.certified_bits),
                point.solved.to_string(),
                point.loss.to_string(),
                point.bracket.map_or_else(String::new, |bracket| bracket.attack.to_string()),
                point.bracket.map_or_else(String::new, |bracket| bracket.residual.to_string()),
            ])?;
        }
    }
    let bytes = writer.into_inner().map_err(|error| csv::Error::from(std::io::Error::other(error.to_string())))?;
    Ok(String::from_utf8(bytes).unwrap_or_default())
}

/// The word that stands for a value in JSON.
fn word(value: &impl serde::Serialize) -> String {
    match serde_json::to_value(value) {
        Ok(Value::String(text)) => text,
        Ok(other) => other.to_string(),
        Err(_) => String::new(),
    }
}

/// For reading on a terminal: one row a value of the grid, one column a curve, then thresholds and what sharing did.
pub fn table(forecast: &Forecast) -> String {
    let name = forecast.swept.name();
    let mut lines = vec!["bits per target round".to_owned(), String::new()];
    for (i, curve) in forecast.curves.iter().enumerate() {
        lines.push(format!("  [{}] {}", i + 1, words(forecast, curve.kind, curve.points.first())));
    }
    let bracketed = forecast.curves.iter().flat_map(|curve| &curve.points).any(|point| point.bracket.is_some());
    let width = if bracketed { 22 } else { 15 };
    let heads: String = (1..=forecast.curves.len()).map(|i| format!("{:>width$}", format!("[{i}]"))).collect();
    lines.extend([String::new(), format!("{name:>14}{heads}")]);
    let rows = forecast.curves.iter().map(|curve| curve.points.len()).max().unwrap_or(0);
    for row in 0..rows {
        let points: Vec<Option<&Point>> = forecast.curves.iter().map(|curve| curve.points.get(row)).collect();
        let value = points.iter().flatten().find_map(|point| point.value(forecast.swept));
        let cells: String = points.iter().map(|point| format!("{:>width$}", point.map_or_else(String::new, cell))).collect();
        lines.push(format!("{:>14}{cells}", value.map_or_else(String::new, plain)));
    }
    if bracketed {
        lines.extend([
            String::new(),
            "a..b: certified is a; an explicit attack with the expected behaviour leaves b of this entropy, so no bound on it can be higher.".to_owned(),
        ]);
    }
    if !forecast.thresholds.is_empty() || !forecast.rounds_needed.is_empty() {
        lines.push(String::new());
    }
    for threshold in &forecast.thresholds {
        let curve = forecast.curves.iter().find(|curve| curve.kind == threshold.kind);
        let kind = words(forecast, threshold.kind, curve.and_then(|curve| curve.points.first()));
        let certifies =
            threshold.certifies_at.map_or_else(|| "certifies nowhere".to_owned(), |value| format!("certifies at {}", plain(value)));
        let not =
            threshold.not_certified_at.map_or_else(String::new, |value| format!(", not at {} (this relaxation, this level)", plain(value)));
        lines.push(format!("{} {kind}: {certifies}{not}", threshold.quantity.name()));
    }
    for needed in &forecast.rounds_needed {
        let kind = words(forecast, needed.kind, None);
        let enough =
            needed.enough.map_or_else(|| "no number of rounds is enough".to_owned(), |rounds| format!("{rounds} rounds are enough"));
        let not = needed.not_enough.map_or_else(String::new, |rounds| format!(", {rounds} are not"));
        lines.push(format!("{} bits, {kind}: {enough}{not}", needed.wanted_bits));
    }
    let sharing = &forecast.sharing;
    lines.extend([
        String::new(),
        format!(
            "{} points: {} solved, {} share their witnesses, which costs at most {} bit per target round; {} solves, and {} more for thresholds",
            sharing.points,
            sharing.solved,
            sharing.shared,
            figure(sharing.worst_loss),
            sharing.solves,
            sharing.search_solves
        ),
        forecast.note.clone(),
    ]);
    lines.join("\n") + "\n"
}

fn words(forecast: &Forecast, kind: Kind, point: Option<&Point>) -> String {
    kind.in_words(forecast.swept, point.and_then(|point| point.total_rounds))
}

fn cell(point: &Point) -> String {
    match (point.reason, point.bracket) {
        (Some(reason), None) => word(&reason),
        (Some(reason), Some(bracket)) => format!("{}..{:.6}", word(&reason), bracket.attack),
        (None, Some(bracket)) => format!("{:.6}..{:.6}", point.bits_per_target_round, bracket.attack),
        (None, None) => format!("{:.6}", point.bits_per_target_round),
    }
}

/// A number that can be copied into a document.
fn plain(value: f64) -> String {
    if value != 0.0 && !(1e-3..1e16).contains(&value.abs()) { format!("{value:.6e}") } else { format!("{}", (value * 1e6).round() / 1e6) }
}
