//! The line below all arrivals: the edge of their lower convex hull that spans the mean of the counter.
//!
//! Arrivals are late by a delay that is never negative, so the true line lies below all of them. Among the
//! lines below, the one with the least sum of distances touches the hull along the edge that spans the mean
//! abscissa (Zhang, Liu and Xia, *Clock synchronization algorithms for network measurements*, INFOCOM 2002).
//! What it cannot see is the shortest delay itself: it stays in the intercept.

/// A line through `(x, y)` points.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Line {
    /// Height at x = 0.
    pub intercept: f64,
    /// Rise per unit of x.
    pub slope: f64,
}

impl Line {
    /// The line's height at `x`.
    pub fn at(&self, x: f64) -> f64 {
        self.intercept + self.slope * x
    }
}

/// The line below `points`, which are in order of x; `None` for fewer than two different x.
pub fn below(points: &[(f64, f64)]) -> Option<Line> {
    let hull = lower_hull(points);
    let mean = points.iter().map(|point| point.0).sum::<f64>() / points.len() as f64;
    let edge = hull.windows(2).find(|edge| edge[1].0 >= mean).or(hull.windows(2).next_back())?;
    let &[(x0, y0), (x1, y1)] = edge else { return None };
    let slope = (y1 - y0) / (x1 - x0);
    Some(Line { intercept: y0 - slope * x0, slope })
}

/// Corners of the lower convex hull, in order (Andrew's monotone chain, 1979).
fn lower_hull(points: &[(f64, f64)]) -> Vec<(f64, f64)> {
    let mut hull: Vec<(f64, f64)> = Vec::new();
    for &(x, y) in points {
        // Of points above each other the lowest counts.
        if hull.last().is_some_and(|last| last.0 == x) {
            if hull.last().is_some_and(|last| last.1 <= y) {
                continue;
            }
            hull.pop();
        }
        while let [.., (x0, y0), (x1, y1)] = hull[..] {
            if (x1 - x0) * (y - y0) - (y1 - y0) * (x - x0) > 0.0 {
                break;
            }
            hull.pop();
        }
        hull.push((x, y));
    }
    hull
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Own drawing: seven points, the hull by hand.
    #[test]
    fn the_edge_over_the_mean_is_taken() {
        let heights = [5.0, 3.2, 6.0, 2.9, 4.0, 2.6, 3.0];
        let points: Vec<(f64, f64)> = (0..7).map(|n| f64::from(n) * 10.0).zip(heights).collect();
        assert_eq!(lower_hull(&points), [(0.0, 5.0), (10.0, 3.2), (30.0, 2.9), (50.0, 2.6), (60.0, 3.0)]);
        let line = below(&points).unwrap();
        assert!((line.slope + 0.015).abs() < 1e-12 && (line.intercept - 3.35).abs() < 1e-12, "{line:?}");
    }

    #[test]
    fn one_point_is_no_line_and_equal_points_count_once() {
        assert_eq!(below(&[]), None);
        assert_eq!(below(&[(1.0, 2.0)]), None);
        assert_eq!(below(&[(1.0, 2.0), (1.0, 1.0)]), None);
        let line = below(&[(0.0, 3.0), (0.0, 1.0), (2.0, 5.0)]).unwrap();
        assert_eq!(line, Line { intercept: 1.0, slope: 2.0 });
    }
}
