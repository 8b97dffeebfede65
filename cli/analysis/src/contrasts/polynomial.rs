//! Orthonormal polynomials over the real positions of the levels.
//!
//! Invariants: the coefficients of each degree have length 1, are orthogonal to a constant and to each other, and give
//! the highest power of the position a positive sign.

/// Coefficients of degree 1, 2, … up to one less than the number of positions, fewer where a further one cannot be told
/// from those before it.
///
/// Forsythe 1957, *Journal of the Society for Industrial and Applied Mathematics* 5:74, by multiplication of the last
/// polynomial with the position and orthogonalisation, done twice to undo the effect of rounding (Giraud, Langou &
/// Rozložník 2005, *Computers & Mathematics with Applications* 50:1069).
pub(super) fn orthonormal(positions: &[f64]) -> Vec<Vec<f64>> {
    let x = standardised(positions);
    let constant = vec![1.0 / (x.len() as f64).sqrt(); x.len()];
    let mut basis = vec![constant];
    while basis.len() < x.len() {
        match next(&basis, &x) {
            Some(polynomial) => basis.push(polynomial),
            None => break,
        }
    }
    basis.split_off(1)
}

/// The positions moved and scaled to lie between −1 and 1.
fn standardised(positions: &[f64]) -> Vec<f64> {
    let low = positions.iter().copied().fold(f64::INFINITY, f64::min);
    let high = positions.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    positions.iter().map(|x| 2.0 * ((x - low) / (high - low)) - 1.0).collect()
}

fn next(basis: &[Vec<f64>], x: &[f64]) -> Option<Vec<f64>> {
    let raised: Vec<f64> = basis.last()?.iter().zip(x).map(|(p, x)| p * x).collect();
    let before = length(&raised);
    let once = orthogonal(basis, raised);
    let twice = orthogonal(basis, once);
    let after = length(&twice);
    // Below this share of its length, what is left of the polynomial has no more digits than the tests need.
    (after > 1e-7 * before).then(|| twice.iter().map(|p| p / after).collect())
}

fn orthogonal(basis: &[Vec<f64>], mut vector: Vec<f64>) -> Vec<f64> {
    for earlier in basis {
        let along: f64 = earlier.iter().zip(&vector).map(|(e, v)| e * v).sum();
        vector.iter_mut().zip(earlier).for_each(|(v, e)| *v -= along * e);
    }
    vector
}

fn length(vector: &[f64]) -> f64 {
    vector.iter().map(|v| v * v).sum::<f64>().sqrt()
}
