//! Keeps a panic of a method from ending the run: it becomes a message.

use std::cell::{Cell, RefCell};
use std::panic::{self, AssertUnwindSafe};
use std::path::Path;
use std::sync::Once;

thread_local! {
    static GUARDED: Cell<bool> = const { Cell::new(false) };
    static PLACE: RefCell<String> = const { RefCell::new(String::new()) };
}

/// Makes panics inside [`guarded`] silent; all others go to the hook that was there before.
fn install_hook() {
    static INSTALL: Once = Once::new();
    INSTALL.call_once(|| {
        let before = panic::take_hook();
        panic::set_hook(Box::new(move |info| {
            if GUARDED.with(Cell::get) {
                // The file's name alone: the folder it was built in is nobody's business.
                let place = info.location().map_or(String::new(), |location| {
                    let file = Path::new(location.file()).file_name().unwrap_or_default();
                    format!("{}:{}", file.to_string_lossy(), location.line())
                });
                PLACE.with(|kept| *kept.borrow_mut() = place);
            } else {
                before(info);
            }
        }));
    });
}

/// Runs `work` and returns what it returns, or the message and place of its panic.
pub(super) fn guarded<T>(work: impl FnOnce() -> T) -> Result<T, String> {
    install_hook();
    let outer = GUARDED.with(|flag| flag.replace(true));
    let result = panic::catch_unwind(AssertUnwindSafe(work));
    GUARDED.with(|flag| flag.set(outer));
    result.map_err(|payload| {
        let text = payload
            .downcast_ref::<&str>()
            .map(|text| (*text).to_owned())
            .or_else(|| payload.downcast_ref::<String>().cloned())
            .unwrap_or_else(|| "a panic without a message".to_owned());
        // A payload may panic again when it is dropped; leaking it is the safe way.
        std::mem::forget(payload);
        let place = PLACE.with(RefCell::take);
        if place.is_empty() { text } else { format!("{text} ({place})") }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_panic_becomes_its_message_and_place() {
        let message = guarded(|| -> usize { panic!("a pivot of {}", 0) }).unwrap_err();
        assert!(message.starts_with("a pivot of 0 (isolation.rs:"), "{message}");
        assert_eq!(guarded(|| 7), Ok(7));
    }
}
