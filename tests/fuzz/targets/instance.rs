//! Native instance files: any text is refused at a place of the text, or is written and read again to the
//! same instance; a certificate in it is proved or refused.
#![no_main]

use libfuzzer_sys::fuzz_target;
use rankassay::formats::instance;
use rankassay::problem::Planted;
use rankassay_fuzz::bounded;

fuzz_target!(|text: &str| {
    match bounded(text.len(), || instance::parse(text, "text")) {
        Ok(read) => {
            let back = instance::parse(&instance::write(&read), "again");
            let back = back.expect("what is written is read");
            assert_eq!(back.problem, read.problem);
            assert_eq!((back.certificate, back.origin), (read.certificate.clone(), read.origin));
            if let Some(certificate) = read.certificate {
                // Proved or not, it ends, and without a panic.
                let _ = Planted::prove(read.problem, certificate);
            }
        }
        Err(error) => {
            assert!(error.line >= 1 && error.column >= 1, "{error}");
            assert!(error.line <= text.matches('\n').count() + 1, "{error}");
        }
    }
});
