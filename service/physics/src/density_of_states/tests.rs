//! The tetrahedron method against closed forms: normalisation, the fcc nearest-neighbour crystal,
//! linear bands.

use std::f64::consts::PI;

use super::*;

/// Reciprocal vectors of fcc with a = 2 Å, rows.
fn fcc_reciprocal() -> Matrix3<f64> {
    Matrix3::new(-1.0, 1.0, 1.0, 1.0, -1.0, 1.0, 1.0, 1.0, -1.0) * PI
}

/// Frequencies of fcc with nearest-neighbour central springs, K = M = 1, a = 2, at the Cartesian
/// wave vector q: D_xx = 2[2 − c_x(c_y + c_z)], D_xy = 2 s_x s_y (Kittel, Introduction to Solid
/// State Physics, ch. 4; Ashcroft & Mermin, ch. 22, fcc with one spring).
fn fcc_frequencies(q: &Vector3<f64>) -> [f64; 3] {
    let (c, s) = (q.map(f64::cos), q.map(f64::sin));
    let matrix = Matrix3::from_fn(|a, b| {
        if a == b {
            2.0 * (2.0 - c[a] * (c.sum() - c[a]))
        } else {
            2.0 * s[a] * s[b]
        }
    });
    let mut squares: Vec<f64> = matrix.symmetric_eigenvalues().iter().copied().collect();
    squares.sort_by(f64::total_cmp);
    std::array::from_fn(|branch| squares[branch].max(0.0).sqrt())
}

fn fcc_mesh(divisions: [usize; 3]) -> Vec<f64> {
    let [n1, n2, n3] = divisions.map(|n| n as f64);
    let mut values = Vec::new();
    for i in 0..divisions[0] {
        for j in 0..divisions[1] {
            for k in 0..divisions[2] {
                let f = Vector3::new(i as f64 / n1, j as f64 / n2, k as f64 / n3);
                values.extend(fcc_frequencies(&fcc_reciprocal().tr_mul(&f)));
            }
        }
    }
    values
}

fn count(divisions: [usize; 3], values: &[f64], edges: &[f64]) -> DensityOfStates {
    let mesh = BranchMesh {
        divisions,
        branch_count: 3,
        wavenumbers_per_cm: values,
        weights: None,
    };
    DensityOfStates::of_mesh(&mesh, &fcc_reciprocal(), edges).unwrap()
}

fn even_edges(last: f64, bins: u32) -> Vec<f64> {
    (0..=bins)
        .map(|i| last * f64::from(i) / f64::from(bins))
        .collect()
}

#[test]
fn closed_form_has_the_zone_boundary_values_of_the_literature() {
    // Squares at X, L and W as in `tests/reference/lattice_exact.toml`.
    let at = |x: f64, y: f64, z: f64| fcc_frequencies(&Vector3::new(x, y, z)).map(|w| w * w);
    let expected = [
        (at(PI, 0.0, 0.0), [4.0, 4.0, 8.0]),
        (at(PI / 2.0, PI / 2.0, PI / 2.0), [2.0, 2.0, 8.0]),
        (at(PI, PI / 2.0, 0.0), [4.0, 6.0, 6.0]),
    ];
    for (found, values) in expected {
        for (a, b) in found.iter().zip(values) {
            assert!((a - b).abs() < 1e-12);
        }
    }
}

#[test]
fn modes_add_up_to_the_number_of_branches_on_any_mesh() {
    for divisions in [[1, 1, 1], [2, 1, 3], [5, 4, 3], [8, 8, 8]] {
        let values = fcc_mesh(divisions);
        for bins in [1, 7, 300] {
            let density = count(divisions, &values, &even_edges(3.0, bins));
            assert!((density.modes().iter().sum::<f64>() - 3.0).abs() < 1e-12);
            assert!(density.modes().iter().all(|&modes| modes > -1e-13));
        }
    }
}

#[test]
fn bins_hold_the_same_however_they_are_cut() {
    let divisions = [6, 5, 7];
    let values = fcc_mesh(divisions);
    let whole = count(divisions, &values, &[0.3, 1.1, 2.0, 2.75]);
    let fine: Vec<f64> = vec![0.3, 0.5, 0.8, 1.1, 1.15, 1.4, 1.7, 2.0, 2.3, 2.75];
    let parts = count(divisions, &values, &fine);
    let sums = [
        parts.modes()[..3].iter().sum::<f64>(),
        parts.modes()[3..7].iter().sum::<f64>(),
        parts.modes()[7..].iter().sum::<f64>(),
    ];
    for (a, b) in whole.modes().iter().zip(sums) {
        assert!((a - b).abs() < 1e-13);
    }
}

/// Σ over branches of the mean over directions of c⁻³, c the sound velocities of the same crystal.
fn mean_inverse_cube_of_velocity() -> f64 {
    let (mut sum, mut points) = (0.0, 0.0);
    let steps = 200;
    for i in 0..steps {
        let z = (f64::from(i) + 0.5) / f64::from(steps);
        for j in 0..steps {
            let angle = 0.5 * PI * (f64::from(j) + 0.5) / f64::from(steps);
            let r = (1.0 - z * z).sqrt();
            let n = Vector3::new(r * angle.cos(), r * angle.sin(), z);
            let matrix = Matrix3::from_fn(|a, b| {
                if a == b {
                    1.0 + n[a] * n[a]
                } else {
                    2.0 * n[a] * n[b]
                }
            });
            let squares = matrix.symmetric_eigenvalues();
            sum += squares.iter().map(|w2| w2.powf(-1.5)).sum::<f64>();
            points += 1.0;
        }
    }
    sum / points
}

#[test]
fn low_frequencies_follow_the_square_law_of_sound() {
    // N(ω) = V ω³/(6π²) Σ⟨c⁻³⟩ with the cell volume V = a³/4 = 2 (Debye 1912, anisotropic).
    // Dispersion raises the bins by up to 3 %, the linear interpolation at Γ lowers the first.
    let divisions = [72; 3];
    let density = count(divisions, &fcc_mesh(divisions), &[0.0, 0.2, 0.3, 0.4]);
    let coefficient = 2.0 / (6.0 * PI * PI) * mean_inverse_cube_of_velocity();
    let bins = density.edges_per_cm().windows(2).zip(density.modes());
    for ((edges, modes), tolerance) in bins.zip([0.05, 0.02, 0.03]) {
        let expected = coefficient * (edges[1].powi(3) - edges[0].powi(3));
        assert!(
            (modes / expected - 1.0).abs() < tolerance,
            "{modes} instead of {expected}"
        );
    }
}

#[test]
fn kinks_lie_at_the_values_of_van_hove() {
    // Critical points of fcc with one spring (`tests/reference/lattice_exact.toml`): transverse √2
    // at L, transverse 2 at X, √6 at W, and the end of the spectrum √8 at X and L (van Hove 1953).
    let divisions = [64; 3];
    let edges = even_edges(3.0, 150);
    let density = count(divisions, &fcc_mesh(divisions), &edges);
    let g = density.density_per_inverse_cm();
    let bends: Vec<(f64, f64)> = g
        .windows(3)
        .enumerate()
        .map(|(i, w)| (edges[i + 1] + 0.01, w[0] - 2.0 * w[1] + w[2]))
        .collect();
    let strongest = |low: f64, high: f64| {
        let inside = bends.iter().filter(|(x, _)| (low..high).contains(x));
        inside.fold((0.0, 0.0_f64), |best, &(x, bend)| {
            if bend.abs() > best.1 {
                (x, bend.abs())
            } else {
                best
            }
        })
    };
    let points = [
        (1.1, 1.8, 2.0),
        (1.7, 2.3, 4.0),
        (2.3, 2.55, 6.0),
        (2.75, 3.0, 8.0_f64),
    ];
    for (low, high, square) in points {
        let (x, bend) = strongest(low, high);
        assert!(
            (x - square.sqrt()).abs() < 0.025,
            "{x} for the square {square}"
        );
        assert!(bend > 0.1);
    }
    assert!(strongest(0.0, 1.0).1 < 0.003 && strongest(1.5, 1.9).1 < 0.003);
    let beyond = edges
        .iter()
        .position(|&edge| edge > 8.0_f64.sqrt())
        .unwrap();
    assert!(g[beyond - 1] > 0.01 && g[beyond..].iter().all(|&value| value.abs() < 1e-10));
}

#[test]
fn mean_frequency_converges_to_the_literature() {
    // ⟨ω⟩ = 1.9283493207049 per mode (`tests/reference/lattice_exact.toml`).
    let divisions = [24; 3];
    let edges = even_edges(2.9, 2900);
    let density = count(divisions, &fcc_mesh(divisions), &edges);
    let first_moment: f64 = density
        .modes()
        .iter()
        .zip(edges.windows(2))
        .map(|(modes, edge)| modes * 0.5 * (edge[0] + edge[1]))
        .sum();
    assert!((first_moment / 3.0 - 1.928_349_320_704_9).abs() < 2e-3);
}

#[test]
fn linear_band_and_flat_band_are_exact() {
    // Two branches: one flat at 5, one linear along the first axis but for its last step back to
    // zero.
    let divisions = [4, 2, 3];
    let values: Vec<f64> = (0..4)
        .flat_map(|i| std::iter::repeat_n([f64::from(i), 5.0], 6))
        .flatten()
        .collect();
    let mesh = BranchMesh {
        divisions,
        branch_count: 2,
        wavenumbers_per_cm: &values,
        weights: None,
    };
    let edges = [0.0, 0.5, 1.0, 2.0, 3.0, 5.0, 6.0];
    let density = DensityOfStates::of_mesh(&mesh, &Matrix3::identity(), &edges).unwrap();
    // Each of the three rising steps spreads a quarter of the modes over one unit, the falling one
    // over three.
    let expected = [
        0.125 + 0.125 / 3.0,
        0.125 + 0.125 / 3.0,
        1.0 / 3.0,
        1.0 / 3.0,
        1.0,
        0.0,
    ];
    for (a, b) in density.modes().iter().zip(expected) {
        assert!((a - b).abs() < 1e-13, "{a} instead of {b}");
    }
    let first = DensityOfStates::of_mesh(&mesh, &Matrix3::identity(), &[5.0, 6.0]).unwrap();
    assert!((first.modes()[0] - 1.0).abs() < 1e-13);
    let above = DensityOfStates::of_mesh(&mesh, &Matrix3::identity(), &[5.5, 6.0]).unwrap();
    assert!(above.modes()[0].abs() < 1e-13);
}

#[test]
fn weights_project_and_complements_add_up() {
    let divisions = [6, 6, 6];
    let values = fcc_mesh(divisions);
    let edges = even_edges(2.9, 58);
    let weights: Vec<f64> = (0..values.len())
        .map(|i| (0.37 * i as f64).sin().powi(2))
        .collect();
    let rest: Vec<f64> = weights.iter().map(|w| 1.0 - w).collect();
    let projected = |weights: &[f64]| {
        let mesh = BranchMesh {
            divisions,
            branch_count: 3,
            wavenumbers_per_cm: &values,
            weights: Some(weights),
        };
        DensityOfStates::of_mesh(&mesh, &fcc_reciprocal(), &edges).unwrap()
    };
    let (part, other, whole) = (
        projected(&weights),
        projected(&rest),
        count(divisions, &values, &edges),
    );
    for (bin, modes) in whole.modes().iter().enumerate() {
        assert!((part.modes()[bin] + other.modes()[bin] - modes).abs() < 1e-13);
    }
    let mean = 3.0 * weights.iter().sum::<f64>() / weights.len() as f64;
    assert!((part.modes().iter().sum::<f64>() - mean).abs() < 1e-12);
}

#[test]
fn cells_are_cut_along_their_shortest_diagonal_into_equal_parts() {
    let skewed = Matrix3::new(1.0, 0.0, 0.0, 0.9, 0.5, 0.0, 0.1, 0.2, 1.0);
    let leaning = Matrix3::new(1.0, 0.0, 0.0, 0.0, 1.0, 0.0, 0.9, 0.9, 1.0);
    let cells = [
        (Matrix3::identity(), [4, 4, 4], [0, 0, 0]),
        (fcc_reciprocal(), [4, 4, 4], [0, 0, 0]),
        (skewed, [4, 4, 4], [0, 1, 0]),
        (skewed, [4, 400, 4], [1, 0, 0]),
        (leaning, [4, 4, 4], [0, 0, 1]),
    ];
    for (reciprocal, divisions, start) in cells {
        let tetrahedra = tetrahedra_of_cell(divisions, &reciprocal);
        let mut volume = 0.0;
        for corners in &tetrahedra {
            assert_eq!(corners[0], start);
            assert_eq!(corners[3], start.map(|x| 1 - x));
            let corner = |c: usize| Vector3::from_fn(|axis, _| corners[c][axis] as f64);
            let edges = [1, 2, 3].map(|c| corner(c) - corner(0));
            let sixfold = Matrix3::from_columns(&edges).determinant().abs();
            assert!((sixfold - 1.0).abs() < 1e-12);
            volume += sixfold / 6.0;
        }
        assert!((volume - 1.0).abs() < 1e-12);
    }
}

#[test]
fn faults_are_all_reported() {
    let mesh = BranchMesh {
        divisions: [2, 1, 1],
        branch_count: 2,
        wavenumbers_per_cm: &[1.0, 2.0, 4.0, 3.0],
        weights: Some(&[1.0, f64::NAN]),
    };
    let errors = DensityOfStates::of_mesh(&mesh, &Matrix3::identity(), &[0.0, 2.0, 2.0]);
    let (what, index) = ("weights", 1);
    let expected = vec![
        DensityError::Length {
            what,
            divisions: [2, 1, 1],
            branch_count: 2,
            expected: 4,
            found: 2,
        },
        DensityError::NotFinite { what, index },
        DensityError::Order { point: 1 },
        DensityError::Edges { index: 2 },
    ];
    assert_eq!(errors, Err(expected));
    let empty = BranchMesh {
        divisions: [0, 1, 1],
        branch_count: 2,
        wavenumbers_per_cm: &[],
        weights: None,
    };
    let errors = DensityOfStates::of_mesh(&empty, &Matrix3::identity(), &[0.0]).unwrap_err();
    assert!(matches!(errors[0], DensityError::Length { .. }));
    assert_eq!(errors[1], DensityError::Edges { index: 1 });
}
