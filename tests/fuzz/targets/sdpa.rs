//! Sparse SDPA files: any text is refused at a place of the text, or is a problem that is written and read
//! again to the same problem.
#![no_main]

use libfuzzer_sys::fuzz_target;
use rankassay::formats::sdpa;
use rankassay::problem::Functional;
use rankassay_fuzz::bounded;

fuzz_target!(|text: &str| {
    match bounded(text.len(), || sdpa::parse(text, "text")) {
        Ok(file) => {
            let problem = file.problem;
            let empty = |functional: &Functional| {
                functional.parts.is_empty() && functional.orthant.is_empty()
            };
            // The format refuses a file without entries; only explicit zeros lead there.
            if !problem.constraints().iter().chain([problem.cost()]).all(empty) {
                let back = sdpa::parse(&sdpa::write(&problem, "again"), "again");
                assert_eq!(back.expect("what is written is read").problem, problem);
            }
        }
        Err(error) => {
            assert!(error.line >= 1 && error.column >= 1, "{error}");
            assert!(error.line <= text.matches('\n').count() + 1, "{error}");
            assert!(error.to_string().starts_with("text:"), "{error}");
        }
    }
});
