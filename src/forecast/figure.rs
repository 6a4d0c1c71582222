//! Numbers as they stand in print.

/// `10ⁿ` for a power of ten, else the figure.
pub(super) fn power_of_ten(value: f64) -> String {
    let exponent = value.log10();
    if (exponent - exponent.round()).abs() < 1e-9 { format!("10{}", raised(exponent.round() as i32)) } else { figure(value) }
}

/// A number in the way of printed tables: three significant digits, as `1.25×10⁻³` where it is very small or very large.
pub(super) fn figure(value: f64) -> String {
    if value == 0.0 {
        return "0".to_owned();
    }
    let text = format!("{value:.2e}");
    let Some((mantissa, exponent)) = text.split_once('e') else { return text };
    let exponent: i32 = exponent.parse().unwrap_or(0);
    let trimmed =
        |text: &str| if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text.to_owned() };
    if (-3..5).contains(&exponent) {
        return trimmed(&format!("{value:.*}", usize::try_from(2 - exponent).unwrap_or(0)));
    }
    match trimmed(mantissa).as_str() {
        "1" => format!("10{}", raised(exponent)),
        mantissa => format!("{mantissa}×10{}", raised(exponent)),
    }
}

fn raised(number: i32) -> String {
    let digit = |character: char| match character {
        '-' => '⁻',
        '0' => '⁰',
        '1' => '¹',
        '2' => '²',
        '3' => '³',
        digit => digit.to_digit(10).and_then(|digit| char::from_u32('⁰' as u32 + digit)).unwrap_or(digit),
    };
    number.to_string().chars().map(digit).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn figures_read_as_in_print() {
        for (value, text) in [
            (0.0, "0"),
            (0.25, "0.25"),
            (0.0213, "0.0213"),
            (0.001, "0.001"),
            (1e-5, "10⁻⁵"),
            (2.128e-5, "2.13×10⁻⁵"),
            (8e6, "8×10⁶"),
            (12345.0, "12345"),
            (1.0, "1"),
        ] {
            assert_eq!(figure(value), text);
        }
        assert_eq!(power_of_ten(1e12), "10¹²");
    }
}
