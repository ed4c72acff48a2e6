//! What a picture consists of: lines, areas and text, in px from the top left corner.
//!
//! Nothing else is drawn, so that a file of vectors and one of pixels show the same. Hatching is lines
//! cut to a rectangle here, not a pattern that one viewer knows and another does not.

/// A place: to the right and down, px.
pub type Place = (f64, f64);

/// A shade of grey or a colour, all below full strength printable: red, green, blue.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Colour(pub u8, pub u8, pub u8);

impl Colour {
    /// Text and frames.
    pub const BLACK: Self = Self(0, 0, 0);
    /// Behind everything.
    pub const WHITE: Self = Self(255, 255, 255);
}

/// How a line is drawn.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pen {
    /// Width, px.
    pub width_px: f64,
    /// Lengths of strokes and gaps in turn, px; empty for a solid line.
    pub dash_px: &'static [f64],
    /// Colour.
    pub colour: Colour,
}

/// Where a text lies with respect to its place.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Anchor {
    /// It begins there.
    Start,
    /// It is centred there.
    Middle,
    /// It ends there.
    End,
}

/// A piece of text.
#[derive(Clone, Debug, PartialEq)]
pub struct Text {
    /// Place on the base line.
    pub at: Place,
    /// Height of the font, px.
    pub size_px: f64,
    /// How it lies there.
    pub anchor: Anchor,
    /// Whether it runs upwards instead of to the right.
    pub is_upright: bool,
    /// What stands there.
    pub text: String,
}

/// A rectangle: left, top, right, bottom, px.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Frame {
    /// Left edge.
    pub left: f64,
    /// Top edge.
    pub top: f64,
    /// Right edge.
    pub right: f64,
    /// Bottom edge.
    pub bottom: f64,
}

impl Frame {
    /// Its corners, clockwise from the top left.
    pub fn corners(&self) -> Vec<Place> {
        vec![
            (self.left, self.top),
            (self.right, self.top),
            (self.right, self.bottom),
            (self.left, self.bottom),
        ]
    }

    /// Width, px.
    pub fn width(&self) -> f64 {
        self.right - self.left
    }
}

/// One element.
#[derive(Clone, Debug, PartialEq)]
pub enum Element {
    /// Connected points.
    Line {
        /// What it is for, as a name that programs find it by.
        name: &'static str,
        /// The points; at least two.
        points: Vec<Place>,
        /// How.
        pen: Pen,
    },
    /// A filled polygon.
    Area {
        /// What it is for.
        name: &'static str,
        /// Its corners.
        points: Vec<Place>,
        /// Colour.
        colour: Colour,
    },
    /// Text.
    Text(Text),
}

/// A picture.
#[derive(Clone, Debug, PartialEq)]
pub struct Scene {
    /// Width, px.
    pub width_px: f64,
    /// Height, px.
    pub height_px: f64,
    /// What it shows, in one line.
    pub title: String,
    /// Its elements, the lowest first.
    pub elements: Vec<Element>,
}

impl Scene {
    /// Adds a line, unless it has fewer than two points.
    pub fn line(&mut self, name: &'static str, points: Vec<Place>, pen: Pen) {
        if points.len() > 1 {
            self.elements.push(Element::Line { name, points, pen });
        }
    }

    /// Adds a filled polygon.
    pub fn area(&mut self, name: &'static str, points: Vec<Place>, colour: Colour) {
        self.elements.push(Element::Area { name, points, colour });
    }

    /// Adds text that runs to the right.
    pub fn text(&mut self, at: Place, size_px: f64, anchor: Anchor, text: impl Into<String>) {
        self.elements.push(Element::Text(Text { at, size_px, anchor, is_upright: false, text: text.into() }));
    }

    /// Adds text that runs upwards.
    pub fn upright_text(&mut self, at: Place, size_px: f64, anchor: Anchor, text: impl Into<String>) {
        self.elements.push(Element::Text(Text { at, size_px, anchor, is_upright: true, text: text.into() }));
    }

    /// Fills a rectangle with rising strokes `spacing_px` apart, measured along an edge.
    pub fn hatch(&mut self, name: &'static str, frame: Frame, spacing_px: f64, pen: Pen) {
        for (from, to) in hatching(frame, spacing_px) {
            self.line(name, vec![from, to], pen);
        }
    }
}

/// Strokes at 45° that rise to the right, cut to a rectangle. On each, the sum of both coordinates is a
/// multiple of the spacing, so that neighbouring rectangles go on from each other.
pub fn hatching(frame: Frame, spacing_px: f64) -> Vec<(Place, Place)> {
    let Frame { left, top, right, bottom } = frame;
    if right <= left || bottom <= top || spacing_px <= 0.0 {
        return Vec::new();
    }
    let first = ((left + top) / spacing_px).ceil() as i64;
    let last = ((right + bottom) / spacing_px).floor() as i64;
    (first..=last)
        .map(|step| step as f64 * spacing_px)
        .map(|sum| {
            let from_x = (sum - bottom).max(left);
            let to_x = (sum - top).min(right);
            ((from_x, sum - from_x), (to_x, sum - to_x))
        })
        .filter(|(from, to)| to.0 > from.0)
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hatching_fills_its_rectangle_and_stays_inside() {
        let frame = Frame { left: 100.0, top: 50.0, right: 130.0, bottom: 250.0 };
        let strokes = hatching(frame, 6.0);
        let inside = |(x, y): Place| {
            (frame.left - 1e-9..=frame.right + 1e-9).contains(&x)
                && (frame.top - 1e-9..=frame.bottom + 1e-9).contains(&y)
        };
        for (from, to) in &strokes {
            assert!(inside(*from) && inside(*to), "{from:?} {to:?}");
            // Rising at 45 degrees.
            assert!(((to.0 - from.0) + (to.1 - from.1)).abs() < 1e-9 && to.0 > from.0);
        }
        // Half perimeter over spacing, less what is cut off at both corners.
        assert!((37..=39).contains(&strokes.len()), "{}", strokes.len());
        // Every point is at most half a spacing, along an edge, from a stroke.
        let sums: Vec<f64> = strokes.iter().map(|(from, _)| from.0 + from.1).collect();
        assert!(sums.windows(2).all(|pair| (pair[1] - pair[0] - 6.0).abs() < 1e-9));
        assert!(sums[0] <= 150.0 + 6.0 && sums[sums.len() - 1] > 380.0 - 6.0);
    }

    #[test]
    fn an_empty_rectangle_has_no_hatching() {
        let frame = Frame { left: 10.0, top: 10.0, right: 10.0, bottom: 100.0 };
        assert!(hatching(frame, 5.0).is_empty());
        assert!(hatching(Frame { right: 5.0, ..frame }, 5.0).is_empty());
    }
}
