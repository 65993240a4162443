//! Plans: any text is a plan or an error at a place of the text.
#![no_main]

use std::path::Path;

use libfuzzer_sys::fuzz_target;
use rankassay::runner::{Plan, Roster};
use rankassay_fuzz::bounded;

fuzz_target!(|text: &str| {
    let read = bounded(text.len(), || {
        Plan::parse(text, "plan.toml", Path::new("folder"), Roster::built_in())
    });
    match read {
        Ok(plan) => {
            assert!((1..=10_000_000).contains(&plan.trial_count()));
            for entrant in &plan.entrants {
                assert!(!entrant.label.is_empty() && !entrant.record().class.is_empty());
            }
        }
        Err(error) => {
            assert!(text.get(error.span.clone()).is_some(), "{error}");
            assert!(error.line <= text.matches('\n').count() + 1 && error.column >= 1, "{error}");
            assert!(error.to_string().starts_with("plan.toml:"), "{error}");
        }
    }
});
