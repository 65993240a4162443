//! Journals: any bytes are records or a reason. After a first line `seal` every line gets its checksum, see
//! `seal`, so that what stands behind the checksum is reached too.
#![no_main]

use std::path::Path;

use libfuzzer_sys::fuzz_target;
use rankassay::runner::journal;
use rankassay_fuzz::{bounded, seal};

fuzz_target!(|text: &[u8]| {
    let bytes = seal::journal(text);
    match bounded(bytes.len(), || journal::parse(Path::new("journal.jsonl"), &bytes)) {
        Ok(contents) => {
            let lines = bytes.iter().filter(|byte| **byte == b'\n').count();
            assert!(1 + contents.instances.len() + contents.records.len() <= lines);
            let torn = !bytes.ends_with(b"\n");
            assert_eq!(contents.torn_notice(Path::new("")).is_some(), torn);
        }
        Err(error) => assert!(error.to_string().starts_with("journal.jsonl")),
    }
});
