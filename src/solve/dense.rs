//! Loops over slices that the dense kernels share.

/// `sum a_i b_i`, in four running sums so that the order of addition is fixed and can be vectorised.
pub(super) fn dot(a: &[f64], b: &[f64]) -> f64 {
    let mut sums = [0.0f64; 4];
    let (left, right) = (a.chunks_exact(4), b.chunks_exact(4));
    let tail: f64 = left.remainder().iter().zip(right.remainder()).map(|(x, y)| x * y).sum();
    for (x, y) in left.zip(right) {
        for k in 0..4 {
            sums[k] += x[k] * y[k];
        }
    }
    (sums[0] + sums[1]) + (sums[2] + sums[3]) + tail
}

/// `y += alpha x`.
pub(super) fn axpy(alpha: f64, x: &[f64], y: &mut [f64]) {
    for (b, a) in y.iter_mut().zip(x) {
        *b += alpha * a;
    }
}

/// Euclidean length.
pub(super) fn norm(a: &[f64]) -> f64 {
    dot(a, a).sqrt()
}

/// Largest absolute entry.
pub(super) fn largest(a: &[f64]) -> f64 {
    a.iter().fold(0.0, |m, v| m.max(v.abs()))
}
