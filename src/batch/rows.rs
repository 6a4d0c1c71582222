//! The counts of a batch as CSV rows.

use std::collections::HashMap;

use csv::{ByteRecord, ReaderBuilder, Trim};

use crate::{counts::Table, fault::Fault, scenario::Geometry};

const COLUMNS: [&str; 4] = ["preparation", "measurement", "outcome", "count"];

/// Rows `preparation,measurement,outcome,count`, each with the line that it stands on.
#[derive(Debug, Clone, PartialEq)]
pub struct Rows {
    rows: Vec<Row>,
}

#[derive(Debug, Clone, Copy, PartialEq)]
struct Row {
    line: u64,
    cell: [usize; 3],
    count: u64,
}

impl Rows {
    /// Reads the rows; the first line names the columns.
    ///
    /// # Errors
    /// Other columns than the four, or a field that is not a whole number; the pointer names line and column.
    pub fn read(text: &[u8]) -> Result<Self, Fault> {
        let mut reader = ReaderBuilder::new().trim(Trim::All).flexible(true).from_reader(text);
        let header = reader.byte_headers().map_err(|error| Fault::new("/lines/1", error.to_string()))?;
        if !header.iter().eq(COLUMNS.iter().map(|name| name.as_bytes())) {
            return Err(Fault::new("/lines/1", format!("the first line names the columns: {}", COLUMNS.join(","))));
        }
        let mut rows = Vec::new();
        let mut record = ByteRecord::new();
        let mut lines = Lines { text, line: 1, at: 0 };
        while reader.read_byte_record(&mut record).map_err(|error| Fault::new("", error.to_string()))? {
            let line = lines.of(record.position().map_or(0, csv::Position::byte));
            rows.push(Row::read(&record, line)?);
        }
        Ok(Self { rows })
    }

    /// The rows as a table; combinations that no row names have a count of zero.
    ///
    /// # Errors
    /// A row outside the geometry, or a combination that is named twice.
    pub fn table(&self, geometry: Geometry) -> Result<Table<u64>, Fault> {
        let Geometry { preparations, measurements, outcomes, .. } = geometry;
        let mut table = vec![vec![vec![0; outcomes]; measurements]; preparations];
        let mut seen = HashMap::new();
        for row in &self.rows {
            for ((index, size), name) in row.cell.iter().zip([preparations, measurements, outcomes]).zip(COLUMNS) {
                if *index >= size {
                    let detail = format!("there is no {name} {index}; they are numbered from 0 to {}", size - 1);
                    return Err(Fault::new(format!("/lines/{}/{name}", row.line), detail));
                }
            }
            if let Some(line) = seen.insert(row.cell, row.line) {
                return Err(Fault::new(format!("/lines/{}", row.line), format!("line {line} already gave this count")));
            }
            let [x, y, b] = row.cell;
            table[x][y][b] = row.count;
        }
        Ok(table)
    }

    /// Turns a fault of the table into one of the rows. A setting without rounds has no row to blame: the words name it.
    pub fn blame(&self, fault: Fault) -> Fault {
        if fault.pointer == "/counts" {
            return Fault { pointer: String::new(), ..fault };
        }
        let Some(path) = fault.pointer.strip_prefix("/counts/") else { return fault };
        let cell: Vec<usize> = path.split('/').filter_map(|index| index.parse().ok()).collect();
        if let Some(row) = self.rows.iter().find(|row| row.cell[..] == cell[..]) {
            return Fault::new(format!("/lines/{}/count", row.line), fault.detail);
        }
        let names: Vec<String> = cell.iter().zip(COLUMNS).map(|(index, name)| format!("{name} {index}")).collect();
        Fault::new("", format!("{}: {}", names.join(", "), fault.detail))
    }
}

/// Counts lines. The reader's own count stands before the blank lines, or the second half of a line's end, that it is about to
/// skip.
struct Lines<'a> {
    text: &'a [u8],
    line: u64,
    at: usize,
}

impl Lines<'_> {
    /// The line on which the record stands that the reader began to look for at this byte; bytes must not decrease.
    fn of(&mut self, byte: u64) -> u64 {
        let mut end = usize::try_from(byte).unwrap_or(usize::MAX).min(self.text.len());
        end += self.text[end..].iter().take_while(|byte| matches!(byte, b'\r' | b'\n')).count();
        self.line += self.text[self.at..end].iter().filter(|byte| **byte == b'\n').count() as u64;
        self.at = end;
        self.line
    }
}

impl Row {
    fn read(record: &ByteRecord, line: u64) -> Result<Self, Fault> {
        if record.len() != COLUMNS.len() {
            return Err(Fault::new(format!("/lines/{line}"), format!("has {} fields in place of {}", record.len(), COLUMNS.len())));
        }
        let mut fields = [0u64; 4];
        for ((field, value), name) in record.iter().zip(&mut fields).zip(COLUMNS) {
            // Digits only: the parser beneath also takes a leading plus.
            let digits = str::from_utf8(field).ok().filter(|text| text.bytes().all(|byte| byte.is_ascii_digit()));
            *value = digits.and_then(|text| text.parse().ok()).ok_or_else(|| {
                let detail = format!("a {name} is a whole number from 0, is \"{}\"", String::from_utf8_lossy(field));
                Fault::new(format!("/lines/{line}/{name}"), detail)
            })?;
        }
        let [x, y, b, count] = fields;
        // An index too large for this machine is outside every geometry all the same.
        let index = |value: u64| usize::try_from(value).unwrap_or(usize::MAX);
        Ok(Self { line, cell: [index(x), index(y), index(b)], count })
    }
}
