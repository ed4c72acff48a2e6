//! A scene as SVG: `line`-free, of `path` and `text` only, with numbers to a hundredth of a pixel.
//!
//! Lines carry their name as `class`, so that a program finds them; strokes of one name and pen that
//! follow each other share one `path`. Written after *Scalable Vector Graphics (SVG) 1.1*, W3C, chapters
//! 8 (paths), 10 (text) and 11 (painting).

use super::scene::{Anchor, Colour, Element, Pen, Place, Scene, Text};
use std::fmt::Write;

/// Fonts asked for, the one the geometry was made with first.
const FONTS: &str = "DejaVu Sans, Verdana, Helvetica, Arial, sans-serif";

/// The text of an SVG file.
pub fn render(scene: &Scene) -> String {
    let (width, height) = (number(scene.width_px), number(scene.height_px));
    let mut svg = String::new();
    let _ = write!(
        svg,
        "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n<svg xmlns=\"http://www.w3.org/2000/svg\" version=\"1.1\" \
         width=\"{width}\" height=\"{height}\" viewBox=\"0 0 {width} {height}\" font-family=\"{FONTS}\">\n\
         <title>{}</title>\n<rect width=\"{width}\" height=\"{height}\" fill=\"{}\"/>\n",
        escaped(&scene.title),
        colour(Colour::WHITE)
    );
    let mut open: Option<(&'static str, Pen)> = None;
    for element in &scene.elements {
        let next = if let Element::Line { name, pen, .. } = element { Some((*name, *pen)) } else { None };
        if open.is_some() && open != next {
            svg.push_str("\"/>\n");
        }
        match element {
            Element::Line { points, name, pen } => {
                if open != next {
                    svg.push_str(&begin_line(name, pen));
                }
                push_points(&mut svg, points);
            }
            Element::Area { name, points, colour: of } => {
                let _ = write!(svg, "<path class=\"{name}\" fill=\"{}\" d=\"", colour(*of));
                push_points(&mut svg, points);
                svg.push_str("Z\"/>\n");
            }
            Element::Text(text) => push_text(&mut svg, text),
        }
        open = next;
    }
    svg.push_str(if open.is_some() { "\"/>\n</svg>\n" } else { "</svg>\n" });
    svg
}

/// A path up to its data.
fn begin_line(name: &str, pen: &Pen) -> String {
    let mut path = format!(
        "<path class=\"{name}\" fill=\"none\" stroke=\"{}\" stroke-width=\"{}\" stroke-linejoin=\"round\"",
        colour(pen.colour),
        number(pen.width_px)
    );
    if !pen.dash_px.is_empty() {
        let lengths: Vec<String> = pen.dash_px.iter().map(|length| number(*length)).collect();
        let _ = write!(path, " stroke-dasharray=\"{}\"", lengths.join(" "));
    }
    path.push_str(" d=\"");
    path
}

fn push_points(svg: &mut String, points: &[Place]) {
    for (place, (x, y)) in points.iter().enumerate() {
        let _ = write!(svg, "{}{} {}", if place == 0 { 'M' } else { 'L' }, number(*x), number(*y));
    }
}

fn push_text(svg: &mut String, text: &Text) {
    let (x, y) = (number(text.at.0), number(text.at.1));
    let anchor = match text.anchor {
        Anchor::Start => "start",
        Anchor::Middle => "middle",
        Anchor::End => "end",
    };
    let turn = if text.is_upright { format!(" transform=\"rotate(-90 {x} {y})\"") } else { String::new() };
    let _ = writeln!(
        svg,
        "<text x=\"{x}\" y=\"{y}\" font-size=\"{}\" text-anchor=\"{anchor}\"{turn}>{}</text>",
        number(text.size_px),
        escaped(&text.text)
    );
}

fn colour(Colour(red, green, blue): Colour) -> String {
    format!("#{red:02x}{green:02x}{blue:02x}")
}

/// To a hundredth, without digits that say nothing.
fn number(value: f64) -> String {
    let text = format!("{value:.2}");
    let text = text.trim_end_matches('0').trim_end_matches('.');
    if text == "-0" { "0".to_owned() } else { text.to_owned() }
}

/// Text fit for XML 1.0: its markup escaped, characters it may not hold left out.
fn escaped(text: &str) -> String {
    let mut escaped = String::with_capacity(text.len());
    for character in text.chars() {
        match character {
            '&' => escaped.push_str("&amp;"),
            '<' => escaped.push_str("&lt;"),
            '>' => escaped.push_str("&gt;"),
            '"' => escaped.push_str("&quot;"),
            '\t' | '\n' | '\r' => escaped.push(' '),
            '\u{0}'..='\u{1f}' | '\u{fffe}' | '\u{ffff}' => {}
            other => escaped.push(other),
        }
    }
    escaped
}

#[cfg(test)]
mod tests {
    use super::*;

    const PEN: Pen = Pen { width_px: 1.5, dash_px: &[6.0, 2.5], colour: Colour(0, 0, 160) };

    #[test]
    fn lines_of_one_pen_share_a_path_and_text_says_what_it_was_given() {
        let mut scene = Scene { width_px: 300.0, height_px: 200.0, title: "a <b>".into(), elements: vec![] };
        scene.line("frame", vec![(0.0, 0.0), (10.0, 0.333_33)], PEN);
        scene.line("frame", vec![(5.0, 5.0), (6.0, 6.0)], PEN);
        scene.line("other", vec![(1.0, 1.0), (2.0, 2.0)], PEN);
        scene.line("lonely", vec![(1.0, 1.0)], PEN);
        scene.upright_text((20.0, 30.0), 11.0, Anchor::Middle, "\"A & B\" < 3\u{7}\n√Hz");
        let svg = render(&scene);
        let document = roxmltree::Document::parse(&svg).unwrap();
        let paths: Vec<(&str, &str)> = document
            .descendants()
            .filter(|node| node.has_tag_name("path"))
            .map(|node| (node.attribute("class").unwrap(), node.attribute("d").unwrap()))
            .collect();
        assert_eq!(paths, [("frame", "M0 0L10 0.33M5 5L6 6"), ("other", "M1 1L2 2")]);
        let dashes = document.descendants().find_map(|node| node.attribute("stroke-dasharray"));
        assert_eq!(dashes, Some("6 2.5"));
        let text = document.descendants().find(|node| node.has_tag_name("text")).unwrap();
        assert_eq!(text.text(), Some("\"A & B\" < 3 √Hz"));
        assert_eq!(text.attribute("transform"), Some("rotate(-90 20 30)"));
    }

    #[test]
    fn a_scene_that_ends_with_a_line_is_closed() {
        let mut scene = Scene { width_px: 10.0, height_px: 10.0, title: String::new(), elements: vec![] };
        assert!(roxmltree::Document::parse(&render(&scene)).is_ok());
        scene.line("last", vec![(0.0, 0.0), (-0.001, 1.0)], PEN);
        let svg = render(&scene);
        assert!(roxmltree::Document::parse(&svg).is_ok() && svg.contains("M0 0L0 1"), "{svg}");
    }
}
