//! Figures, embedded as images, so that nothing inside a drawing can reach the page.

use maud::{Markup, html};

use super::encode::base64;
use super::grid::anchor;
use crate::tables::figures::Figure;

/// Writes a figure with its caption and its text alternative.
pub(super) fn picture(figure: &Figure, id: &str) -> Markup {
    let label = format!("{id}-title");
    let size = size(&figure.svg);
    let width = size.map(|(width, _)| width);
    let height = size.map(|(_, height)| height);
    html! {
        figure id=(id) aria-labelledby=(label) {
            h3 id=(label) { (figure.title) " " (anchor(id, &figure.title)) }
            div.scroll.drawing tabindex="0" role="region" aria-label={ (figure.title) ", figure" } {
                img alt=(figure.alt) width=[width] height=[height]
                    src={ "data:image/svg+xml;base64," (base64(figure.svg.as_bytes())) };
            }
            figcaption { (figure.caption) }
            details.columns {
                summary { "In words" span.unseen { ": " (figure.title) } }
                p { (figure.alt) }
            }
        }
    }
}

/// Reads width and height off the first tag of a drawing, in whole pixels; from its view box when it has
/// no size of its own.
fn size(svg: &str) -> Option<(u32, u32)> {
    let start = svg.find("<svg")?;
    let tag = &svg[start..start + svg[start..].find('>')?];
    let attribute = |name: &str| {
        let at = tag.find(&format!(" {name}=\""))? + name.len() + 3;
        tag[at..].split('"').next()
    };
    let whole = |text: &str| {
        let value: f64 = text.trim_end_matches("px").parse().ok()?;
        (1.0..=1e5).contains(&value).then_some(value as u32)
    };
    let own = attribute("width").and_then(whole).zip(attribute("height").and_then(whole));
    own.or_else(|| {
        let numbers: Vec<&str> = attribute("viewBox")?.split_whitespace().collect();
        whole(numbers.get(2)?).zip(whole(numbers.get(3)?))
    })
}

#[cfg(test)]
mod tests {
    use super::size;

    #[test]
    fn sizes_are_read_off_the_first_tag() {
        assert_eq!(
            size(r#"<?xml?><svg width="720" height="480" viewBox="0 0 1 1">"#),
            Some((720, 480))
        );
        assert_eq!(size(r#"<svg viewBox="0 0 640 400"><rect width="3"/>"#), Some((640, 400)));
        assert_eq!(size(r#"<svg width="100%">"#), None);
        assert_eq!(size("no drawing"), None);
    }
}
