//! Householder triangularisation of a tall matrix held by columns.
//!
//! Invariant: only orthogonal transformations are applied, so lengths and determinants (up to sign) are those of the
//! input to a few units in the last place.

/// The upper triangle R of X = QR, by columns, for a matrix with at least as many rows as columns; a wider matrix is
/// returned as it is, which serves as well wherever only XᵀX matters.
///
/// Householder 1958, *Journal of the ACM* 5:339; Golub & Van Loan 2013, *Matrix Computations*, algorithm 5.2.1.
pub(super) fn triangular(mut columns: Vec<Vec<f64>>) -> Vec<Vec<f64>> {
    let width = columns.len();
    if columns.iter().any(|column| column.len() < width) {
        return columns;
    }
    for step in 0..width {
        reflect(&mut columns, step);
    }
    columns.iter_mut().for_each(|column| column.truncate(width));
    columns
}

/// Makes zeros below the diagonal in column `step`, and takes the later columns along.
fn reflect(columns: &mut [Vec<f64>], step: usize) {
    let Some((pivot, later)) = columns.get_mut(step..).and_then(<[_]>::split_first_mut) else { return };
    let Some(v) = pivot.get_mut(step..) else { return };
    let length = dot(v, v).sqrt();
    let Some(first) = v.first_mut() else { return };
    if length == 0.0 {
        return;
    }
    let diagonal = -length.copysign(*first);
    *first -= diagonal;
    let half_square = -diagonal * *first;
    for column in later {
        if let Some(below) = column.get_mut(step..) {
            let scale = dot(v, below) / half_square;
            below.iter_mut().zip(v.iter()).for_each(|(x, direction)| *x -= scale * direction);
        }
    }
    v.fill(0.0);
    if let Some(first) = v.first_mut() {
        *first = diagonal;
    }
}

/// In four strands, which the processor adds side by side, and which also shortens the chain of roundings.
fn dot(a: &[f64], b: &[f64]) -> f64 {
    let (blocks, rest) = (a.chunks_exact(4), a.chunks_exact(4).remainder());
    let others = b.chunks_exact(4);
    let tail: f64 = rest.iter().zip(others.remainder()).map(|(x, y)| x * y).sum();
    let mut strands = [0.0; 4];
    for (x, y) in blocks.zip(others) {
        strands.iter_mut().zip(x.iter().zip(y)).for_each(|(strand, (x, y))| *strand += x * y);
    }
    strands.iter().sum::<f64>() + tail
}
