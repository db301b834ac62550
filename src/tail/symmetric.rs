//! Symmetric matrices of a handful of rows: what the curvature of a likelihood needs and no more.

use super::likelihood::MAX_DIMENSION;

/// A symmetric matrix, stored whole; only the leading `size` rows and columns count.
#[derive(Clone, Debug, PartialEq)]
pub(crate) struct Symmetric {
    size: usize,
    rows: [[f64; MAX_DIMENSION]; MAX_DIMENSION],
}

/// Sweeps of the Jacobi method; convergence is quadratic and eight rows need about six.
const SWEEPS: usize = 30;

impl Symmetric {
    /// The zero matrix.
    pub(crate) fn zero(size: usize) -> Symmetric {
        Symmetric { size, rows: [[0.0; MAX_DIMENSION]; MAX_DIMENSION] }
    }

    /// `value` on the diagonal.
    pub(crate) fn diagonal(size: usize, value: f64) -> Symmetric {
        let mut matrix = Symmetric::zero(size);
        for i in 0..size {
            matrix.rows[i][i] = value;
        }
        matrix
    }

    pub(crate) fn size(&self) -> usize {
        self.size
    }

    pub(crate) fn get(&self, i: usize, j: usize) -> f64 {
        self.rows[i][j]
    }

    /// Sets the entry and its mirror image.
    pub(crate) fn set(&mut self, i: usize, j: usize, value: f64) {
        self.rows[i][j] = value;
        self.rows[j][i] = value;
    }

    /// `self · v`.
    pub(crate) fn times(&self, v: &[f64]) -> [f64; MAX_DIMENSION] {
        let mut product = [0.0; MAX_DIMENSION];
        for (p, row) in product.iter_mut().zip(&self.rows).take(self.size) {
            *p = dot(&row[..self.size], v);
        }
        product
    }

    /// Eigenvalues and eigenvectors by cyclic Jacobi rotations (Golub & Van Loan, *Matrix Computations*,
    /// section 8.5).
    pub(crate) fn eigen(&self) -> Eigen {
        let n = self.size;
        let mut a = self.rows;
        let mut vectors = Symmetric::diagonal(n, 1.0).rows;
        for _ in 0..SWEEPS {
            let off: f64 =
                (0..n).flat_map(|i| (0..i).map(move |j| (i, j))).map(|(i, j)| a[i][j].powi(2)).sum();
            let on: f64 = (0..n).map(|i| a[i][i].powi(2)).sum();
            if off <= 1e-32 * on {
                break;
            }
            for p in 0..n {
                for q in p + 1..n {
                    rotate(&mut a, &mut vectors, n, p, q);
                }
            }
        }
        let mut values = [0.0; MAX_DIMENSION];
        for (i, value) in values.iter_mut().enumerate().take(n) {
            *value = a[i][i];
        }
        Eigen { size: n, values, vectors }
    }
}

/// One Jacobi rotation, which makes `a[p][q]` vanish.
fn rotate(
    a: &mut [[f64; MAX_DIMENSION]; MAX_DIMENSION],
    vectors: &mut [[f64; MAX_DIMENSION]; MAX_DIMENSION],
    n: usize,
    p: usize,
    q: usize,
) {
    if a[p][q] == 0.0 {
        return;
    }
    let half = (a[q][q] - a[p][p]) / (2.0 * a[p][q]);
    let tangent = half.signum() / (half.abs() + half.hypot(1.0));
    let cosine = 1.0 / tangent.hypot(1.0);
    let sine = tangent * cosine;
    let turn = |x: f64, y: f64| (cosine * x - sine * y, sine * x + cosine * y);
    for row in a.iter_mut().take(n) {
        (row[p], row[q]) = turn(row[p], row[q]);
    }
    let (above, below) = a.split_at_mut(q);
    for (x, y) in above[p].iter_mut().zip(&mut below[0]).take(n) {
        (*x, *y) = turn(*x, *y);
    }
    for row in vectors.iter_mut().take(n) {
        (row[p], row[q]) = turn(row[p], row[q]);
    }
}

/// A spectral decomposition: column `k` of `vectors` belongs to `values[k]`. Not sorted.
#[derive(Clone, Debug)]
pub(crate) struct Eigen {
    size: usize,
    values: [f64; MAX_DIMENSION],
    vectors: [[f64; MAX_DIMENSION]; MAX_DIMENSION],
}

impl Eigen {
    /// The least eigenvalue, and the coordinate in which its direction points most.
    pub(crate) fn least(&self) -> (f64, usize) {
        let k = (0..self.size).min_by(|&i, &j| self.values[i].total_cmp(&self.values[j])).unwrap_or(0);
        let size = |i: usize| self.vectors[i][k].abs();
        let along = (0..self.size).max_by(|&i, &j| size(i).total_cmp(&size(j))).unwrap_or(0);
        (self.values[k], along)
    }

    /// `Q f(Λ) Qᵀ` for a function of the eigenvalues.
    pub(crate) fn rebuild(&self, f: impl Fn(f64) -> f64) -> Symmetric {
        let mut matrix = Symmetric::zero(self.size);
        for i in 0..self.size {
            for j in 0..=i {
                let entry =
                    (0..self.size).map(|k| self.vectors[i][k] * f(self.values[k]) * self.vectors[j][k]).sum();
                matrix.set(i, j, entry);
            }
        }
        matrix
    }

    /// `Q f(Λ) Qᵀ v` for a function of the eigenvalues: an inverse, a square root.
    pub(crate) fn apply(&self, f: impl Fn(f64) -> f64, v: &[f64]) -> [f64; MAX_DIMENSION] {
        let mut result = [0.0; MAX_DIMENSION];
        for k in 0..self.size {
            let along: f64 = (0..self.size).map(|i| self.vectors[i][k] * v[i]).sum();
            let scaled = f(self.values[k]) * along;
            for (r, row) in result.iter_mut().zip(&self.vectors).take(self.size) {
                *r += scaled * row[k];
            }
        }
        result
    }
}

pub(crate) fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn decomposes_and_inverts() {
        // The second-difference matrix: eigenvalues 2 - 2 cos(kπ/(n+1)) (textbook, e.g. Strang).
        let n = 5;
        let mut m = Symmetric::diagonal(n, 2.0);
        for i in 1..n {
            m.set(i, i - 1, -1.0);
        }
        let eigen = m.eigen();
        let mut values = eigen.values[..n].to_vec();
        values.sort_by(f64::total_cmp);
        for (k, value) in values.iter().enumerate() {
            let exact = 2.0 - 2.0 * ((k + 1) as f64 * std::f64::consts::PI / 6.0).cos();
            assert!((value - exact).abs() < 1e-14, "{value} {exact}");
        }
        let v = [1.0, -2.0, 0.5, 3.0, 0.25];
        let back = m.times(&eigen.apply(|l| 1.0 / l, &v)[..n]);
        assert!(back.iter().zip(&v).all(|(b, v)| (b - v).abs() < 1e-13));
        let (least, along) = eigen.least();
        assert!((least - values[0]).abs() < 1e-15);
        assert_eq!(along, 2);
    }
}
