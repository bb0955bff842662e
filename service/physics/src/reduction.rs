//! Short vectors of a lattice, so that few images need a look however skewed the cell is.

use nalgebra::Matrix3;

/// Rows of the integer matrix P for which P·cell is a basis of short vectors (cell vectors as rows).
///
/// Minkowski-reduced (Nguyen & Stehlé, ACM Trans. Algorithms 5, 46 (2009)); where rounding leaves that reduction short of
/// its own conditions, Niggli-reduced (Křivý & Gruber, Acta Cryst. A 32, 297 (1976)).
pub(crate) fn short_basis(cell: &Matrix3<f64>) -> Matrix3<i32> {
    let lattice = moyo::base::Lattice::new(*cell);
    let (_, transform) = lattice
        .minkowski_reduce()
        .unwrap_or_else(|_| lattice.unchecked_niggli_reduce());
    // The library keeps lattice vectors as columns, reduced = basis · transform; ours are rows.
    transform.transpose()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A skewed basis of a cubic lattice, right- and left-handed: three orthogonal edges come back.
    #[test]
    fn short_vectors_of_a_skewed_cubic_lattice_are_its_edges() {
        let edges = Matrix3::identity() * 4.2;
        for skew in [
            Matrix3::new(1, 7, -3, 0, 1, 5, 0, 0, 1),
            Matrix3::new(0, 0, 1, 0, 1, 5, 1, 7, -3),
        ] {
            let cell = skew.map(f64::from) * edges;
            let short = short_basis(&cell).map(f64::from) * cell;
            for row in short.row_iter() {
                assert!((row.norm() - 4.2).abs() < 1e-9, "{short}");
            }
        }
    }
}
