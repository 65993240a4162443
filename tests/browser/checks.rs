//! What every page of ours must do in a browser.

use serde_json::{Value, json};

use super::driver::{Browser, TAB};

/// Runs every check; the browser shows the page freshly loaded.
pub fn check_all(browser: &Browser) {
    check_quiet(browser);
    check_figures(browser);
    check_widths(browser);
    check_small_screen(browser);
    check_contrast(browser);
    check_keyboard(browser);
    check_print(browser);
}

/// Checks that loading the page asked for nothing but the file and embedded data, and that the console
/// holds neither an error nor a warning.
pub fn check_quiet(browser: &Browser) {
    let mut files = 0;
    for entry in browser.log("performance") {
        let text = entry["message"].as_str().expect("an event is text");
        let event: Value = serde_json::from_str(text).expect("an event is JSON");
        if event["message"]["method"] != "Network.requestWillBeSent" {
            continue;
        }
        let url = event["message"]["params"]["request"]["url"]
            .as_str()
            .expect("a request has an address");
        let allowed = ["file://", "data:", "about:"].iter().any(|start| url.starts_with(start));
        assert!(allowed, "the page asks for {url}");
        files += usize::from(url.starts_with("file://"));
    }
    assert_eq!(files, 1, "the page is one file");
    let complaints = |entries: Vec<Value>| -> Vec<Value> {
        entries
            .into_iter()
            .filter(|entry| matches!(entry["level"].as_str(), Some("SEVERE" | "WARNING")))
            .collect()
    };
    let found = complaints(browser.log("browser"));
    assert!(found.is_empty(), "the console says {found:#?}");
    // The log does record what it would have to record.
    browser.run("console.error('probe');");
    assert_eq!(complaints(browser.log("browser")).len(), 1, "the console is not recorded");
}

/// Checks that every image is decoded, has a size and a text alternative.
pub fn check_figures(browser: &Browser) {
    browser.complain(
        "figures",
        "return [...document.querySelectorAll('figure')].filter((figure) => {
            const image = figure.querySelector('img');
            return !image || !image.complete || image.naturalWidth === 0 || image.clientWidth < 100
                || image.clientHeight < 50 || image.alt.trim() === '';
        }).map((figure) => figure.id);",
    );
}

/// Checks that the page itself never scrolls sideways, on a phone, a tablet and a screen.
pub fn check_widths(browser: &Browser) {
    for (width, height) in [(375, 800), (800, 1000), (1280, 900), (1920, 1080)] {
        browser.resize(width, height);
        for open in ["true", "false"] {
            let sizes = browser.run(&format!(
                "if ({open}) document.querySelectorAll('details').forEach((part) => part.open = true);
                 return [document.documentElement.scrollWidth, document.documentElement.clientWidth, innerWidth];"
            ));
            assert_eq!(sizes[0], sizes[1], "the page scrolls sideways at a width of {width}");
            assert_eq!(sizes[2], width);
        }
    }
}

/// Checks sizes of text and of what is touched, on a phone.
pub fn check_small_screen(browser: &Browser) {
    browser.resize(375, 800);
    browser.complain(
        "text below 14 px",
        "const small = new Set();
         const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
         while (walk.nextNode()) {
            const owner = walk.currentNode.parentElement;
            if (walk.currentNode.data.trim() === '' || owner.closest('script')) continue;
            if (parseFloat(getComputedStyle(owner).fontSize) < 13.5) small.add(owner.outerHTML.slice(0, 120));
         }
         return [...small];",
    );
    browser.complain(
        "targets below 24 px",
        "return [...document.querySelectorAll('button, input, select, summary, nav a, a.anchor')]
            .filter((part) => part.checkVisibility())
            .filter((part) => {
                const box = part.getBoundingClientRect();
                return box.width < 24 || box.height < 24;
            }).map((part) => part.outerHTML.slice(0, 120));",
    );
}

/// Checks that every text stands out from its background by at least 4.5 to 1, light and dark (the
/// ratio of WCAG 2.2, success criterion 1.4.3).
pub fn check_contrast(browser: &Browser) {
    browser.resize(1280, 900);
    let mut papers = Vec::new();
    for scheme in ["light", "dark"] {
        browser.show_as("screen", scheme);
        papers.push(browser.run("return getComputedStyle(document.body).backgroundColor;"));
        browser.complain(&format!("contrast, {scheme}"), CONTRAST);
    }
    assert_ne!(papers[0], papers[1], "the dark scheme is not applied");
    browser.show_as("screen", "light");
}

const CONTRAST: &str = "
    document.querySelectorAll('details').forEach((part) => part.open = true);
    const parse = (text) => {
        const numbers = text.match(/[\\d.]+/g).map(Number);
        return { rgb: numbers.slice(0, 3), alpha: numbers.length > 3 ? numbers[3] : 1 };
    };
    const light = (rgb) => {
        const [r, g, b] = rgb.map((c) => {
            const s = c / 255;
            return s <= 0.04045 ? s / 12.92 : ((s + 0.055) / 1.055) ** 2.4;
        });
        return 0.2126 * r + 0.7152 * g + 0.0722 * b;
    };
    const background = (part) => {
        for (let at = part; at; at = at.parentElement) {
            const { rgb, alpha } = parse(getComputedStyle(at).backgroundColor);
            if (alpha === 1) return rgb;
            if (alpha !== 0) throw new Error('a background is half transparent');
        }
        throw new Error('the page has no background');
    };
    const found = new Set();
    let seen = 0;
    const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
    while (walk.nextNode()) {
        const owner = walk.currentNode.parentElement;
        if (walk.currentNode.data.trim() === '' || !owner.checkVisibility() || owner.tagName === 'OPTION') continue;
        const [a, b] = [light(parse(getComputedStyle(owner).color).rgb), light(background(owner))];
        const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
        seen += 1;
        if (ratio < 4.5) found.add(`${ratio.toFixed(2)} ${owner.outerHTML.slice(0, 120)}`);
    }
    if (seen === 0) found.add('no text was looked at');
    return [...found];";

/// Checks that the tabulator key reaches everything that can be used, each with a visible mark.
pub fn check_keyboard(browser: &Browser) {
    browser.resize(1280, 900);
    let count = browser.run(
        "document.querySelectorAll('details').forEach((part) => part.open = true);
         const all = document.querySelectorAll('a[href], button, input, select, summary, [tabindex=\"0\"]');
         window.controls = new Map([...all].filter((part) => part.checkVisibility({ visibilityProperty: true }))
            .map((part) => [part, false]));
         window.unmarked = [];
         document.addEventListener('focusin', ({ target }) => {
            if (!window.controls.has(target)) return;
            window.controls.set(target, true);
            const style = getComputedStyle(target);
            if (style.outlineStyle === 'none' || parseFloat(style.outlineWidth) < 2)
                window.unmarked.push(target.outerHTML.slice(0, 120));
         });
         document.activeElement.blur();
         getSelection().removeAllRanges();
         scrollTo(0, 0);
         return window.controls.size;",
    );
    let count = usize::try_from(count.as_u64().expect("a count")).expect("a small count");
    assert!(count > 0, "the page has nothing to use");
    let mut left = count + 10;
    while left > 0 {
        let some = left.min(50);
        browser.press(&vec![TAB; some]);
        left -= some;
    }
    browser.complain(
        "not reached by keyboard",
        "return [...window.controls].filter(([, seen]) => !seen).map(([part]) => part.outerHTML.slice(0, 160));",
    );
    browser.complain("focus is not visible", "return window.unmarked;");
}

/// Checks the page as printed: controls hidden, everything unfolded, black on white, no table wider than
/// an A4 sheet.
pub fn check_print(browser: &Browser) {
    browser.run("document.querySelectorAll('details').forEach((part) => part.open = false);");
    browser.show_as("print", "dark");
    browser.complain(
        "folded on paper",
        "return [...document.querySelectorAll('details:not([open])')].map((part) => part.outerHTML.slice(0, 120));",
    );
    browser.complain(
        "controls on paper",
        "return [...document.querySelectorAll('input, select, button:not(thead button), nav, .skip')]
            .filter((part) => part.checkVisibility()).map((part) => part.outerHTML.slice(0, 120));",
    );
    let colours = browser.run(
        "const style = getComputedStyle(document.body); return [style.color, style.backgroundColor];",
    );
    assert_eq!(colours, json!(["rgb(0, 0, 0)", "rgb(255, 255, 255)"]));
    // A4 between margins of 15 mm, at 96 dots per inch: 180 mm upright, 267 mm across.
    for (width, part) in [(680, ".grid:not(.wide)"), (1009, ".grid.wide")] {
        browser.resize(width, 1000);
        browser.complain(
            "cut on paper",
            &format!(
                "return [...document.querySelectorAll('{part} table, pre')]
                    .filter((part) => part.getBoundingClientRect().right > {width} + 1 || part.scrollWidth > {width})
                    .map((part) => part.closest('[id]').id + ' ' + part.getBoundingClientRect().right);"
            ),
        );
    }
    browser.show_as("screen", "light");
    browser.complain(
        "still unfolded after printing",
        "return [...document.querySelectorAll('details.columns[open]')].map((part) => part.outerHTML.slice(0, 120));",
    );
    browser.resize(1280, 900);
}
