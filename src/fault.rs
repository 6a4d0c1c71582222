//! What is wrong with a document, and where.

use serde::de::DeserializeOwned;

/// One reason to turn a document away, with the place in the document that is to blame.
///
/// `pointer` is an RFC 6901 JSON pointer into the document; the empty pointer means the document as a whole.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("{}: {detail}", if pointer.is_empty() { "document" } else { pointer })]
pub struct Fault {
    pub pointer: String,
    pub detail: String,
}

impl Fault {
    pub fn new(pointer: impl Into<String>, detail: impl Into<String>) -> Self {
        Self { pointer: pointer.into(), detail: detail.into() }
    }

    /// The same fault, seen from the document that holds this one at `prefix`.
    pub fn under(self, prefix: &str) -> Self {
        Self { pointer: format!("{prefix}{}", self.pointer), ..self }
    }
}

/// Reads a JSON document into its plain type.
///
/// # Errors
/// The first deviation from the shape, with the pointer of the offending value.
pub fn parse<T: DeserializeOwned>(text: &[u8]) -> Result<T, Fault> {
    let mut reader = serde_json::Deserializer::from_slice(text);
    let value = serde_path_to_error::deserialize(&mut reader).map_err(|error| {
        let pointer = pointer_of(error.path());
        Fault::new(pointer, error.into_inner().to_string())
    })?;
    reader.end().map_err(|error| Fault::new("", error.to_string()))?;
    Ok(value)
}

/// Reads a JSON object into its plain type. An array of the members' values in order, which the derived readers also take, is
/// turned away: nobody means it.
///
/// # Errors
/// As [`parse`], and for whatever is no object.
pub fn parse_object<T: DeserializeOwned>(text: &[u8]) -> Result<T, Fault> {
    if text.trim_ascii_start().first() == Some(&b'[') {
        return Err(Fault::new("", "expected an object, not an array"));
    }
    parse(text)
}

fn pointer_of(path: &serde_path_to_error::Path) -> String {
    use serde_path_to_error::Segment;
    path.iter()
        .map(|segment| match segment {
            Segment::Seq { index } => format!("/{index}"),
            Segment::Map { key } => format!("/{}", key.replace('~', "~0").replace('/', "~1")),
            Segment::Enum { variant } => format!("/{variant}"),
            Segment::Unknown => String::new(),
        })
        .collect()
}
