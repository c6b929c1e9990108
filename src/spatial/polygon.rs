//! Plane polygons and their moments.

/// A corner turns, and a polygon is wide, if the sine of the angle is above this: rounding stays far below.
const FLAT: f64 = 1e-9;

/// A flat convex polygon, counter-clockwise (m). See [`Polygon::new`].
#[derive(Debug, Clone, PartialEq)]
pub struct Polygon {
    vertices: Vec<[f64; 2]>,
}

/// Area (m^2), first moments (m^3) and second moments (m^4) of a polygon about its frame's origin.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Moments {
    /// Area.
    pub area: f64,
    /// `int x dA`, `int y dA`.
    pub first: [f64; 2],
    /// `int x^2 dA`, `int y^2 dA`, `int x y dA`.
    pub second: [f64; 3],
}

/// Why a list of points is not a sole.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum PolygonError {
    /// Fewer than three vertices.
    #[error("a sole polygon needs at least 3 vertices, got {0}")]
    TooFewVertices(usize),
    /// A vertex is not finite.
    #[error("vertex {0} is not finite")]
    NotFinite(usize),
    /// The vertices lie on one line, or on one point.
    #[error("the vertices lie on one line, so that the sole has no area; the kind \"point\" needs no vertices")]
    NoArea,
    /// The vertices run clockwise.
    #[error("the vertices run clockwise (signed area {0} m^2); list them counter-clockwise seen from +z")]
    Clockwise(f64),
    /// The corner at this vertex turns the wrong way, is flat, or an edge has no length.
    #[error("the polygon is not strictly convex at vertex {0}")]
    NotConvex(usize),
}

impl Polygon {
    /// A strictly convex, counter-clockwise polygon.
    pub fn new(vertices: Vec<[f64; 2]>) -> Result<Self, PolygonError> {
        let n = vertices.len();
        if n < 3 {
            return Err(PolygonError::TooFewVertices(n));
        }
        if let Some(i) = vertices.iter().position(|v| !(v[0].is_finite() && v[1].is_finite())) {
            return Err(PolygonError::NotFinite(i));
        }
        if on_one_line(&vertices) {
            return Err(PolygonError::NoArea);
        }
        // A crossed outline that encloses as much to its left as to its right passes here; its corners give it away.
        let area = moments(&vertices).area;
        if area < 0.0 {
            return Err(PolygonError::Clockwise(area));
        }
        let mut turning = 0.0;
        for i in 0..n {
            let (a, b, c) = (vertices[(i + n - 1) % n], vertices[i], vertices[(i + 1) % n]);
            let (u, v) = ([b[0] - a[0], b[1] - a[1]], [c[0] - b[0], c[1] - b[1]]);
            let cross = u[0] * v[1] - u[1] * v[0];
            let lengths = u[0].hypot(u[1]) * v[0].hypot(v[1]);
            if cross <= FLAT * lengths || lengths == 0.0 {
                return Err(PolygonError::NotConvex(i));
            }
            turning += cross.atan2(u[0] * v[0] + u[1] * v[1]);
        }
        // Every corner turns left and yet the outline goes round more than once: a star.
        if turning > 1.5 * std::f64::consts::TAU {
            return Err(PolygonError::NotConvex(0));
        }
        Ok(Polygon { vertices })
    }

    /// The vertices, counter-clockwise (m).
    pub fn vertices(&self) -> &[[f64; 2]] {
        &self.vertices
    }

    /// Area and moments about the sole frame's origin.
    pub fn moments(&self) -> Moments {
        moments(&self.vertices)
    }
}

/// True where no vertex is further from the line through the first vertex and the one farthest from it than [`FLAT`] of
/// their distance.
fn on_one_line(vertices: &[[f64; 2]]) -> bool {
    let from_first = |v: &[f64; 2]| [v[0] - vertices[0][0], v[1] - vertices[0][1]];
    let along = vertices.iter().map(from_first).max_by(|a, b| a[0].hypot(a[1]).total_cmp(&b[0].hypot(b[1])));
    let Some([x, y]) = along else { return true };
    let square = x * x + y * y;
    vertices.iter().map(from_first).all(|[u, v]| (x * v - y * u).abs() <= FLAT * square)
}

/// Moments of any simple polygon (signed: negative when clockwise), by Green's theorem: sums over
/// the edges (x, y) -> (X, Y) with c = x Y - X y, e.g. `int x^2 = sum (x^2 + x X + X^2) c / 12`.
pub fn moments(vertices: &[[f64; 2]]) -> Moments {
    let mut m = Moments { area: 0.0, first: [0.0; 2], second: [0.0; 3] };
    for i in 0..vertices.len() {
        let [x, y] = vertices[i];
        let [xx, yy] = vertices[(i + 1) % vertices.len()];
        let c = x * yy - xx * y;
        m.area += c / 2.0;
        m.first[0] += (x + xx) * c / 6.0;
        m.first[1] += (y + yy) * c / 6.0;
        m.second[0] += (x * x + x * xx + xx * xx) * c / 12.0;
        m.second[1] += (y * y + y * yy + yy * yy) * c / 12.0;
        m.second[2] += (x * yy + 2.0 * x * y + 2.0 * xx * yy + xx * y) * c / 24.0;
    }
    m
}

/// The surface that meets the ground.
#[derive(Debug, Clone, PartialEq)]
pub enum SoleShape {
    /// A flat convex polygon in the sole frame's x-y plane, counter-clockwise.
    Polygon(Polygon),
    /// A point foot at the sole frame's origin: force only.
    Point,
}
