//! An integer supercell matrix and the lattice translations inside it.
//!
//! Rows of S are the supercell vectors in the primitive basis; any non-singular integer matrix is allowed, non-diagonal
//! and left-handed ones too. Translations are integer triples in the primitive basis, taken modulo the supercell lattice.

use std::collections::HashMap;

use nalgebra::{Matrix3, Vector3};

/// A lattice translation in the primitive basis.
pub type Translation = [i64; 3];

/// What is wrong with a supercell, one entry a fault.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum SupercellError {
    /// The matrix spans no volume.
    #[error("the supercell matrix is singular")]
    Singular,
    /// More cells, or larger matrix elements, than the service takes.
    #[error("the supercell holds {cells} cells; at most {limit} are taken")]
    TooLarge {
        /// |det S|, saturated.
        cells: u64,
        /// Largest number taken.
        limit: u64,
    },
    /// The list of translations has the wrong length.
    #[error("{found} translations, but the supercell matrix has determinant ±{expected}")]
    Count {
        /// |det S|.
        expected: usize,
        /// Length of the list.
        found: usize,
    },
    /// Two entries are the same modulo the supercell lattice.
    #[error("translations {first} and {second} are the same modulo the supercell")]
    Repeated {
        /// Index of the first.
        first: usize,
        /// Index of the second.
        second: usize,
    },
}

/// Largest number of cells in a supercell.
pub const CELLS_MAX: u64 = 4096;
/// Largest absolute value of a supercell matrix element or translation component.
pub const ELEMENT_MAX: i64 = 1024;

/// A supercell with its complete set of translations; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct Supercell {
    matrix: [[i64; 3]; 3],
    determinant: i64,
    adjugate: [[i64; 3]; 3],
    translations: Vec<Translation>,
    by_residue: HashMap<Translation, usize>,
}

impl Supercell {
    /// A supercell from its matrix and a complete list of translations, in the order in which arrays use them.
    ///
    /// # Errors
    /// Everything that is wrong, at once.
    pub fn new(
        matrix: [[i64; 3]; 3],
        translations: Vec<Translation>,
    ) -> Result<Self, Vec<SupercellError>> {
        let (determinant, adjugate) = checked_determinant(&matrix).map_err(|e| vec![e])?;
        let mut errors = Vec::new();
        let expected = usize::try_from(determinant.unsigned_abs()).unwrap_or(usize::MAX);
        if translations.len() != expected {
            errors.push(SupercellError::Count {
                expected,
                found: translations.len(),
            });
        }
        let mut by_residue = HashMap::with_capacity(translations.len());
        for (second, translation) in translations.iter().enumerate() {
            if translation
                .iter()
                .any(|x| x.unsigned_abs() > ELEMENT_MAX.unsigned_abs())
            {
                errors.push(SupercellError::TooLarge {
                    cells: u64::MAX,
                    limit: CELLS_MAX,
                });
                continue;
            }
            let residue = residue_of(translation, &adjugate, determinant);
            match by_residue.entry(residue) {
                std::collections::hash_map::Entry::Vacant(slot) => {
                    slot.insert(second);
                }
                std::collections::hash_map::Entry::Occupied(slot) => {
                    errors.push(SupercellError::Repeated {
                        first: *slot.get(),
                        second,
                    });
                }
            }
        }
        if errors.is_empty() {
            Ok(Self {
                matrix,
                determinant,
                adjugate,
                translations,
                by_residue,
            })
        } else {
            Err(errors)
        }
    }

    /// A supercell with translations of its own choosing: those in the half-open parallelepiped, in lexical order.
    ///
    /// # Errors
    /// As [`Supercell::new`].
    pub fn with_default_translations(matrix: [[i64; 3]; 3]) -> Result<Self, Vec<SupercellError>> {
        let (determinant, adjugate) = checked_determinant(&matrix).map_err(|e| vec![e])?;
        let bound: [i64; 3] = std::array::from_fn(|c| matrix.iter().map(|row| row[c].abs()).sum());
        let mut seen = HashMap::new();
        let cells = determinant.unsigned_abs();
        'search: for x in 0..=bound[0] {
            for y in 0..=bound[1] {
                for z in 0..=bound[2] {
                    let translation = [x, y, z];
                    seen.entry(residue_of(&translation, &adjugate, determinant))
                        .or_insert(translation);
                    if seen.len() as u64 == cells {
                        break 'search;
                    }
                }
            }
        }
        let mut translations: Vec<Translation> = seen.into_values().collect();
        translations.sort_unstable();
        Self::new(matrix, translations)
    }

    /// Rows are the supercell vectors in the primitive basis.
    pub fn matrix(&self) -> &[[i64; 3]; 3] {
        &self.matrix
    }

    /// Number of primitive cells, |det S|.
    pub fn cell_count(&self) -> usize {
        self.translations.len()
    }

    /// The translations, in the order in which arrays use them.
    pub fn translations(&self) -> &[Translation] {
        &self.translations
    }

    /// Index of the translation that equals `translation` modulo the supercell.
    pub fn index_of(&self, translation: &Translation) -> usize {
        let residue = residue_of(translation, &self.adjugate, self.determinant);
        // The list is complete by construction, so that every residue is present.
        self.by_residue.get(&residue).copied().unwrap_or_default()
    }

    /// Index of −R for the translation R with index `index`.
    pub fn negative(&self, index: usize) -> usize {
        self.index_of(&self.translations[index].map(|x| -x))
    }

    /// Index of R₁ + R₂, by indices.
    pub fn sum(&self, first: usize, second: usize) -> usize {
        let (a, b) = (self.translations[first], self.translations[second]);
        self.index_of(&std::array::from_fn(|c| a[c] + b[c]))
    }

    /// Supercell vectors as rows, Å, for a primitive cell given as rows.
    pub fn vectors(&self, cell: &Matrix3<f64>) -> Matrix3<f64> {
        self.matrix_f64() * cell
    }

    /// S as floating-point numbers.
    pub fn matrix_f64(&self) -> Matrix3<f64> {
        Matrix3::from_fn(|r, c| self.matrix[r][c] as f64)
    }

    /// Whether S·q is integer: the wave vector (fractional reciprocal coordinates) fits the supercell. `tolerance` is
    /// absolute, in fractional units.
    pub fn is_commensurate(&self, q: &Vector3<f64>, tolerance: f64) -> bool {
        let phase = self.matrix_f64() * q;
        phase.iter().all(|x| (x - x.round()).abs() <= tolerance)
    }

    /// All commensurate wave vectors modulo the reciprocal lattice, each component in [0, 1), Γ first.
    pub fn commensurate_points(&self) -> Vec<Vector3<f64>> {
        // S q = m  ⇒  q = adj(S) m / det S; the residues of adj(S) m modulo det are the points.
        let modulus = self.determinant.abs();
        let sign = self.determinant.signum();
        let columns: [Translation; 3] =
            std::array::from_fn(|c| std::array::from_fn(|r| sign * self.adjugate[r][c]));
        let mut points = vec![[0_i64; 3]];
        let mut known: std::collections::HashSet<Translation> = points.iter().copied().collect();
        let mut next = 0;
        while next < points.len() {
            let point = points[next];
            next += 1;
            for column in &columns {
                let moved: Translation =
                    std::array::from_fn(|r| (point[r] + column[r]).rem_euclid(modulus));
                if known.insert(moved) {
                    points.push(moved);
                }
            }
        }
        points.sort_unstable();
        points
            .iter()
            .map(|p| Vector3::from_fn(|r, _| p[r] as f64 / modulus as f64))
            .collect()
    }

    /// For each reciprocal axis the least common denominator of the commensurate points along it.
    pub fn axis_denominators(&self) -> [u64; 3] {
        let modulus = self.determinant.unsigned_abs();
        std::array::from_fn(|r| {
            let row_gcd = self.adjugate[r]
                .iter()
                .fold(modulus, |g, x| gcd(g, x.unsigned_abs()));
            modulus / row_gcd
        })
    }

    /// Whether the rotation W (acting on fractional column coordinates) maps the supercell lattice onto itself:
    /// S·Wᵀ·S⁻¹ integer.
    pub fn is_kept_by(&self, rotation: &[[i64; 3]; 3]) -> bool {
        (0..3).all(|row| {
            let image: Translation =
                std::array::from_fn(|c| (0..3).map(|k| rotation[c][k] * self.matrix[row][k]).sum());
            residue_of(&image, &self.adjugate, self.determinant) == [0, 0, 0]
        })
    }
}

fn checked_determinant(matrix: &[[i64; 3]; 3]) -> Result<(i64, [[i64; 3]; 3]), SupercellError> {
    if matrix
        .iter()
        .flatten()
        .any(|x| x.unsigned_abs() > ELEMENT_MAX.unsigned_abs())
    {
        return Err(SupercellError::TooLarge {
            cells: u64::MAX,
            limit: CELLS_MAX,
        });
    }
    // With elements below 2^10 every product of three fits an i64 easily.
    let adjugate: [[i64; 3]; 3] = std::array::from_fn(|r| {
        std::array::from_fn(|c| {
            let (r1, r2) = ((c + 1) % 3, (c + 2) % 3);
            let (c1, c2) = ((r + 1) % 3, (r + 2) % 3);
            matrix[r1][c1] * matrix[r2][c2] - matrix[r1][c2] * matrix[r2][c1]
        })
    });
    let determinant = (0..3).map(|k| matrix[0][k] * adjugate[k][0]).sum::<i64>();
    match determinant.unsigned_abs() {
        0 => Err(SupercellError::Singular),
        cells if cells > CELLS_MAX => Err(SupercellError::TooLarge {
            cells,
            limit: CELLS_MAX,
        }),
        _ => Ok((determinant, adjugate)),
    }
}

/// R = m S with m = R·adj(S)/det S: R·adj(S) modulo det S labels R modulo the supercell.
fn residue_of(
    translation: &Translation,
    adjugate: &[[i64; 3]; 3],
    determinant: i64,
) -> Translation {
    std::array::from_fn(|c| {
        (0..3)
            .map(|r| translation[r] * adjugate[r][c])
            .sum::<i64>()
            .rem_euclid(determinant.abs())
    })
}

fn gcd(a: u64, b: u64) -> u64 {
    if b == 0 { a } else { gcd(b, a % b) }
}
