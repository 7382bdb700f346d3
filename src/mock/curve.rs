//! Smooth curves through a few nodes, laid out on an even grid for fast look-up.
//!
//! Between nodes: cubic Hermite with three-point slopes (common practice). Outside the grid the end values hold.

/// A function of magnitude on an even grid, read off by linear interpolation.
pub struct Curve {
    from: f64,
    per_step: f64,
    values: Vec<f64>,
}

impl Curve {
    /// Lays the curve through `nodes` (rising first coordinate, two or more) on a grid of `step` from the first node to
    /// the last.
    pub fn through(nodes: &[(f64, f64)], step: f64) -> Self {
        let from = nodes[0].0;
        let steps = libm::ceil((nodes[nodes.len() - 1].0 - from) / step - 1e-9) as usize;
        let values = (0..=steps).map(|i| hermite(nodes, from + i as f64 * step)).collect();
        Self { from, per_step: 1.0 / step, values }
    }

    /// The value at `x`.
    pub fn at(&self, x: f64) -> f64 {
        let position = ((x - self.from) * self.per_step).clamp(0.0, (self.values.len() - 1) as f64);
        let i = (position as usize).min(self.values.len() - 2);
        self.values[i] + (position - i as f64) * (self.values[i + 1] - self.values[i])
    }
}

fn hermite(nodes: &[(f64, f64)], x: f64) -> f64 {
    let last = nodes.len() - 1;
    let x = x.clamp(nodes[0].0, nodes[last].0);
    let i = nodes[1..last].iter().take_while(|node| node.0 <= x).count();
    let slope = |i: usize| (nodes[i + 1].1 - nodes[i].1) / (nodes[i + 1].0 - nodes[i].0);
    let tangent = |i: usize| match i {
        0 => slope(0),
        i if i == last => slope(last - 1),
        i => 0.5 * (slope(i - 1) + slope(i)),
    };
    let ((x0, y0), (x1, y1)) = (nodes[i], nodes[i + 1]);
    let (width, t) = (x1 - x0, (x - x0) / (x1 - x0));
    let (t2, t3) = (t * t, t * t * t);
    (2.0 * t3 - 3.0 * t2 + 1.0) * y0
        + (t3 - 2.0 * t2 + t) * width * tangent(i)
        + (3.0 * t2 - 2.0 * t3) * y1
        + (t3 - t2) * width * tangent(i + 1)
}
