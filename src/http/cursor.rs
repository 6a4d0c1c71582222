//! Cursors: where the next page of a collection begins. Base64, because a client hands them back as they are and does not take them apart.
//!
//! Public for the sake of what tests it with inputs at random; the routes are the interface.

use std::{fmt::Display, str::FromStr};

use base64::{Engine, engine::general_purpose::URL_SAFE_NO_PAD};

/// The cursor of a place in the collection that `kind` names, in characters that a query need not escape.
pub fn write(kind: &str, place: impl Display) -> String {
    URL_SAFE_NO_PAD.encode(format!("{kind}{place}"))
}

/// The place that [`write()`] wrote for the same kind. `None` for any other text: each place has one cursor.
pub fn read<T: FromStr + Display>(kind: &str, text: &str) -> Option<T> {
    let bytes = URL_SAFE_NO_PAD.decode(text).ok()?;
    let written = str::from_utf8(&bytes).ok()?.strip_prefix(kind)?;
    written.parse().ok().filter(|place: &T| place.to_string() == written)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_place_has_one_cursor() {
        assert_eq!(read("rigs:", &write("rigs:", 7)), Some(7u64));
        for other in [write("rigs:", "+7"), write("rigs:", "07"), write("leakage:", 7), write("rigs:", ""), "!".into(), String::new()] {
            assert_eq!(read::<u64>("rigs:", &other), None, "{other}");
        }
    }
}
