//! A headless Chromium for tests, spoken to over the W3C WebDriver protocol, and the checks that every
//! page of ours must pass.
//!
//! Needs the programs `chromium` and `chromedriver` (Debian packages chromium and chromium-driver) on the
//! path. Where they are absent [`open`] says so and returns nothing, unless the environment variable
//! `RANKASSAY_REQUIRE` contains the word `browser`: then it panics.

#![allow(dead_code, unused_imports, reason = "each test file uses its own part of this module")]
#![allow(clippy::print_stderr, reason = "a skipped test says so")]

mod checks;
mod driver;

pub use checks::{
    check_all, check_contrast, check_figures, check_keyboard, check_print, check_quiet,
    check_small_screen, check_widths,
};
pub use driver::{Browser, ENTER};

use std::env;
use std::path::{Path, PathBuf};

/// Finds a program on the path.
fn program(name: &str) -> Option<PathBuf> {
    let path = env::var_os("PATH")?;
    env::split_paths(&path).map(|folder| folder.join(name)).find(|file| file.is_file())
}

/// Opens a file in a fresh headless browser; nothing, with a message, where there is no browser.
///
/// # Panics
/// When a program is missing although `RANKASSAY_REQUIRE` asks for the browser, or when the browser
/// does not start within its time limits.
pub fn open(page: &Path) -> Option<Browser> {
    let (chromium, chromedriver) = (program("chromium"), program("chromedriver"));
    let missing: Vec<&str> = [("chromium", &chromium), ("chromedriver", &chromedriver)]
        .into_iter()
        .filter(|(_, found)| found.is_none())
        .map(|(name, _)| name)
        .collect();
    let (Some(chromium), Some(chromedriver)) = (chromium, chromedriver) else {
        let required = env::var("RANKASSAY_REQUIRE").unwrap_or_default();
        let missing = missing.join(" and ");
        assert!(
            !required.split([',', ' ']).any(|word| word == "browser"),
            "RANKASSAY_REQUIRE asks for a browser, but {missing} cannot be found on the path"
        );
        eprintln!("skipped: {missing} cannot be found on the path");
        return None;
    };
    let browser = Browser::start(&chromium, &chromedriver);
    browser.go(page);
    Some(browser)
}
