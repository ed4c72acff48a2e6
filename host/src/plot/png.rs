//! A scene as PNG: the same lines, areas and text, filled in by pixels.
//!
//! Text is set in DejaVu Sans, a free font that comes with the program, glyph by glyph with the font's
//! own advances; no font of the computer is asked for.

use super::PlotError;
use super::scene::{Anchor, Colour, Element, Pen, Place, Scene, Text};
use tiny_skia::{FillRule, Paint, Path, PathBuilder, Pixmap, Stroke, StrokeDash, Transform};
use ttf_parser::{Face, OutlineBuilder};

/// Pixels per px of the scene: 192 pixels per inch of print.
const PIXELS_PER_PX: f64 = 2.0;

/// The bytes of a PNG file.
///
/// # Errors
/// When there is no memory for the picture, or it cannot be packed.
pub fn render(scene: &Scene) -> Result<Vec<u8>, PlotError> {
    let pixels = |length_px: f64| (length_px * PIXELS_PER_PX).round().max(1.0) as u32;
    let mut pixmap =
        Pixmap::new(pixels(scene.width_px), pixels(scene.height_px)).ok_or(PlotError::Picture)?;
    pixmap.fill(tiny_skia::Color::WHITE);
    let face = Face::parse(dejavu::sans::regular(), 0).map_err(|_| PlotError::Picture)?;
    let scale = Transform::from_scale(PIXELS_PER_PX as f32, PIXELS_PER_PX as f32);
    for element in &scene.elements {
        match element {
            Element::Line { points, pen, .. } => draw_line(&mut pixmap, points, pen, scale),
            Element::Area { points, colour, .. } => {
                if let Some(path) = path_of(points, true) {
                    pixmap.fill_path(&path, &paint(*colour), FillRule::Winding, scale, None);
                }
            }
            Element::Text(text) => draw_text(&mut pixmap, text, &face, scale),
        }
    }
    pixmap.encode_png().map_err(|_| PlotError::Picture)
}

fn paint(Colour(red, green, blue): Colour) -> Paint<'static> {
    let mut paint = Paint { anti_alias: true, ..Paint::default() };
    paint.set_color_rgba8(red, green, blue, 255);
    paint
}

fn path_of(points: &[Place], is_closed: bool) -> Option<Path> {
    let mut builder = PathBuilder::new();
    for (place, (x, y)) in points.iter().enumerate() {
        if place == 0 {
            builder.move_to(*x as f32, *y as f32);
        } else {
            builder.line_to(*x as f32, *y as f32);
        }
    }
    if is_closed {
        builder.close();
    }
    builder.finish()
}

fn draw_line(pixmap: &mut Pixmap, points: &[Place], pen: &Pen, scale: Transform) {
    let lengths: Vec<f32> = pen.dash_px.iter().map(|length| *length as f32).collect();
    let stroke = Stroke {
        width: pen.width_px as f32,
        line_join: tiny_skia::LineJoin::Round,
        dash: if lengths.is_empty() { None } else { StrokeDash::new(lengths, 0.0) },
        ..Stroke::default()
    };
    if let Some(path) = path_of(points, false) {
        pixmap.stroke_path(&path, &paint(pen.colour), &stroke, scale, None);
    }
}

/// Outlines of glyphs on one base line, in units of the font, upwards.
struct Outline {
    path: PathBuilder,
    pen_x: f32,
}

impl OutlineBuilder for Outline {
    fn move_to(&mut self, x: f32, y: f32) {
        self.path.move_to(self.pen_x + x, y);
    }
    fn line_to(&mut self, x: f32, y: f32) {
        self.path.line_to(self.pen_x + x, y);
    }
    fn quad_to(&mut self, x1: f32, y1: f32, x: f32, y: f32) {
        self.path.quad_to(self.pen_x + x1, y1, self.pen_x + x, y);
    }
    fn curve_to(&mut self, x1: f32, y1: f32, x2: f32, y2: f32, x: f32, y: f32) {
        self.path.cubic_to(self.pen_x + x1, y1, self.pen_x + x2, y2, self.pen_x + x, y);
    }
    fn close(&mut self) {
        self.path.close();
    }
}

fn draw_text(pixmap: &mut Pixmap, text: &Text, face: &Face<'_>, scale: Transform) {
    let mut outline = Outline { path: PathBuilder::new(), pen_x: 0.0 };
    for character in text.text.chars().filter(|character| !character.is_control()) {
        // What the font does not have shows as its box for missing glyphs, number 0.
        let glyph = face.glyph_index(character).unwrap_or(ttf_parser::GlyphId(0));
        // Spaces have no outline.
        let _ = face.outline_glyph(glyph, &mut outline);
        outline.pen_x += f32::from(face.glyph_hor_advance(glyph).unwrap_or(0));
    }
    let Some(path) = outline.path.finish() else { return };
    let units = text.size_px as f32 / f32::from(face.units_per_em().max(1));
    let start = match text.anchor {
        Anchor::Start => 0.0,
        Anchor::Middle => -outline.pen_x / 2.0,
        Anchor::End => -outline.pen_x,
    };
    let turn = if text.is_upright { Transform::from_rotate(-90.0) } else { Transform::identity() };
    let transform = Transform::from_translate(start, 0.0)
        .post_scale(units, -units)
        .post_concat(turn)
        .post_translate(text.at.0 as f32, text.at.1 as f32)
        .post_concat(scale);
    pixmap.fill_path(&path, &paint(Colour::BLACK), FillRule::Winding, transform, None);
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Dark pixels of a picture, as columns and rows.
    fn dark(scene: &Scene) -> Vec<(u32, u32)> {
        let pixmap = Pixmap::decode_png(&render(scene).unwrap()).unwrap();
        let width = pixmap.width();
        let places = pixmap.pixels().iter().enumerate();
        places
            .filter(|(_, pixel)| pixel.red() < 128)
            .map(|(place, _)| (place as u32 % width, place as u32 / width))
            .collect()
    }

    fn scene() -> Scene {
        Scene { width_px: 200.0, height_px: 100.0, title: String::new(), elements: vec![] }
    }

    #[test]
    fn text_ends_begins_or_is_centred_where_its_anchor_says() {
        for (anchor, left, right) in
            [(Anchor::Start, 200, 400), (Anchor::End, 0, 200), (Anchor::Middle, 0, 400)]
        {
            let mut scene = scene();
            scene.text((100.0, 60.0), 20.0, anchor, "1 µV/√Hz");
            let dark = dark(&scene);
            let columns = (dark.iter().map(|p| p.0).min().unwrap(), dark.iter().map(|p| p.0).max().unwrap());
            println!("{anchor:?}: columns {columns:?}");
            assert!(columns.0 >= left && columns.1 < right && columns.1 - columns.0 > 120, "{columns:?}");
            let middle = f64::from(columns.0 + columns.1) / 2.0;
            assert!(anchor != Anchor::Middle || (middle - 200.0).abs() < 6.0, "{middle}");
            // Capitals stand on the base line, 0.73 em high.
            let top = dark.iter().map(|p| p.1).min().unwrap();
            assert!((84..100).contains(&top), "{top}");
        }
    }

    #[test]
    fn upright_text_runs_upwards_from_its_place() {
        let mut scene = scene();
        scene.upright_text((100.0, 90.0), 10.0, Anchor::Start, "IIIIIIIIII");
        let dark = dark(&scene);
        assert!(dark.iter().all(|(x, y)| (184..=201).contains(x) && *y <= 180));
        assert!(dark.iter().map(|p| p.1).min().unwrap() < 140);
    }

    #[test]
    fn dashes_leave_gaps() {
        let mut scene = scene();
        scene.line(
            "x",
            vec![(10.0, 50.0), (190.0, 50.0)],
            Pen { width_px: 2.0, dash_px: &[10.0, 10.0], colour: Colour::BLACK },
        );
        let dark: Vec<u32> = dark(&scene).into_iter().filter(|p| p.1 == 100).map(|p| p.0).collect();
        // Nine strokes of 10 px at two pixels each.
        assert!((178..=182).contains(&dark.len()), "{}", dark.len());
        assert!(dark.contains(&30) && !dark.contains(&50) && dark.contains(&70));
    }
}
