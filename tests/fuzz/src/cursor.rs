//! Cursors of pages: each place has one, and it is read as what was written.
#![no_main]

use bitassay::{http::cursor, profile::RigName};

mod engine;

/// Collections with pages, as `src/http` names them.
const KINDS: [&str; 4] = ["certifications:", "commitments:", "leakage:", "rigs:"];

engine::target!(run);

fn run(text: &[u8]) {
    let Ok(text) = str::from_utf8(text) else { return };
    let mut read = 0;
    for kind in KINDS {
        if let Some(number) = cursor::read::<u64>(kind, text) {
            assert_eq!(cursor::write(kind, number), text, "a number with two cursors");
            read += 1;
        }
        if let Some(rig) = cursor::read::<RigName>(kind, text) {
            assert_eq!(cursor::write(kind, &rig), text, "a rig with two cursors");
            // Digits name a rig as well as a number.
            read += usize::from(rig.as_str().parse::<u64>().is_err());
        }
        // The text as a place: what is written is read again, and by no other collection.
        let written = cursor::write(kind, text);
        assert!(written.bytes().all(|byte| byte.is_ascii_alphanumeric() || matches!(byte, b'-' | b'_')), "{written:?}");
        for other in KINDS {
            assert_eq!(cursor::read::<String>(other, &written).as_deref(), (other == kind).then_some(text));
        }
    }
    assert!(read <= 1, "a cursor of two collections");
}
