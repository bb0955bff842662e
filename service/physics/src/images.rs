//! Where the atoms of a pair really are: the nearest supercell images, and how they share one constant.
//!
//! A constant Φ[l,i,j] is the sum over all images of atom j under the supercell lattice. The nearest images carry it;
//! images that are equally near share equally. Distances within `tie_tolerance_ang` of the nearest are ties: too tight
//! a tolerance breaks symmetric shares by the noise of the positions and bends branches.

use nalgebra::{Matrix3, Vector3};
use rayon::prelude::*;

use crate::crystal::Crystal;
use crate::reduction::short_basis;
use crate::supercell::Supercell;

/// A lattice translation R in the primitive basis, with R ≡ R_l modulo the supercell.
pub type ImageTranslation = [i32; 3];

/// For every (l, i, j) the translations of the nearest images of atom j seen from atom i of the home cell.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PairImages {
    atom_count: usize,
    first: Vec<u32>,
    translations: Vec<ImageTranslation>,
}

/// Images tried on each side along each axis of the reduced supercell basis.
///
/// In a reduced basis the nearest lattice point to any point is within one step of the rounded coordinates;
/// the second step is margin for ties at the border.
const SEARCH_STEPS: i32 = 2;

impl PairImages {
    /// Nearest images with ties closer than `tie_tolerance_ang` (Å). Cost O(L n²).
    pub fn find(crystal: &Crystal, supercell: &Supercell, tie_tolerance_ang: f64) -> Self {
        let n = crystal.atom_count();
        let search = ImageSearch::new(crystal, supercell);
        let rows: Vec<Vec<Vec<ImageTranslation>>> = (0..supercell.cell_count() * n)
            .into_par_iter()
            .map(|row| {
                let (cell, displaced) = (row / n, row % n);
                (0..n)
                    .map(|response| search.nearest(cell, displaced, response, tie_tolerance_ang))
                    .collect()
            })
            .collect();
        let mut first = vec![0];
        let mut translations = Vec::new();
        for images in rows.into_iter().flatten() {
            translations.extend_from_slice(&images);
            first.push(u32::try_from(translations.len()).unwrap_or(u32::MAX));
        }
        Self {
            atom_count: n,
            first,
            translations,
        }
    }

    /// Translations of the nearest images of the pair, at least one; each carries an equal share.
    pub fn of(&self, cell: usize, displaced: usize, response: usize) -> &[ImageTranslation] {
        let pair = (cell * self.atom_count + displaced) * self.atom_count + response;
        &self.translations[self.first[pair] as usize..self.first[pair + 1] as usize]
    }

    /// Cartesian separation vectors R + r_j − r_i of the nearest images, Å.
    pub fn separations<'a>(
        &'a self,
        crystal: &'a Crystal,
        cell: usize,
        displaced: usize,
        response: usize,
    ) -> impl ExactSizeIterator<Item = Vector3<f64>> + 'a {
        let offset = crystal.positions()[response] - crystal.positions()[displaced];
        self.of(cell, displaced, response)
            .iter()
            .map(move |image| crystal.cartesian(&(offset + image_vector(image))))
    }

    /// The mean of the separation vectors, Å; zero where opposite images tie.
    pub fn mean_separation(
        &self,
        crystal: &Crystal,
        cell: usize,
        displaced: usize,
        response: usize,
    ) -> Vector3<f64> {
        let vectors = self.separations(crystal, cell, displaced, response);
        let count = vectors.len() as f64;
        vectors.sum::<Vector3<f64>>() / count
    }

    /// Distance of the nearest image, Å.
    pub fn distance(
        &self,
        crystal: &Crystal,
        cell: usize,
        displaced: usize,
        response: usize,
    ) -> f64 {
        self.separations(crystal, cell, displaced, response)
            .map(|x| x.norm())
            .fold(f64::INFINITY, f64::min)
    }
}

/// An image translation as a vector of fractional coordinates.
pub fn image_vector(image: &ImageTranslation) -> Vector3<f64> {
    Vector3::from(image.map(f64::from))
}

/// For every (l, i, j) the images of a pair with shares that fall off with distance.
#[derive(Debug, Clone, PartialEq)]
pub struct ImageShares {
    atom_count: usize,
    first: Vec<u32>,
    shares: Vec<(ImageTranslation, f64)>,
}

impl ImageShares {
    /// Shares ∝ d⁻⁸, summing to one; an atom with itself keeps its constant. Images whose share is below a thousandth of
    /// the largest are left out. Cost O(L n²).
    pub fn inverse_power(crystal: &Crystal, supercell: &Supercell) -> Self {
        let n = crystal.atom_count();
        let search = ImageSearch::new(crystal, supercell);
        let rows: Vec<Vec<Vec<(ImageTranslation, f64)>>> = (0..supercell.cell_count() * n)
            .into_par_iter()
            .map(|row| {
                (0..n)
                    .map(|j| search.inverse_power(row / n, row % n, j))
                    .collect()
            })
            .collect();
        let mut first = vec![0];
        let mut shares = Vec::new();
        for pair in rows.into_iter().flatten() {
            shares.extend_from_slice(&pair);
            first.push(u32::try_from(shares.len()).unwrap_or(u32::MAX));
        }
        Self {
            atom_count: n,
            first,
            shares,
        }
    }

    /// Images of the pair and their shares.
    pub fn of(&self, cell: usize, displaced: usize, response: usize) -> &[(ImageTranslation, f64)] {
        let pair = (cell * self.atom_count + displaced) * self.atom_count + response;
        &self.shares[self.first[pair] as usize..self.first[pair + 1] as usize]
    }
}

/// Length of the shortest vector of the supercell lattice, Å: the first of a Minkowski-reduced basis.
pub fn shortest_supercell_vector_ang(crystal: &Crystal, supercell: &Supercell) -> f64 {
    let vectors = ImageSearch::new(crystal, supercell).reduced * crystal.cell();
    vectors
        .row_iter()
        .map(|row| row.norm())
        .fold(f64::INFINITY, f64::min)
}

/// The search for images of a pair.
#[derive(Debug, Clone)]
struct ImageSearch<'a> {
    crystal: &'a Crystal,
    supercell: &'a Supercell,
    /// Rows: short vectors of the supercell lattice in primitive coordinates.
    reduced: Matrix3<f64>,
    to_reduced: Matrix3<f64>,
    /// Supercell translations within [`SEARCH_STEPS`], in primitive coordinates and in Å.
    steps: Vec<(ImageTranslation, Vector3<f64>)>,
}

impl<'a> ImageSearch<'a> {
    /// Prepares the search: reduces the supercell lattice.
    fn new(crystal: &'a Crystal, supercell: &'a Supercell) -> Self {
        let short = short_basis(&supercell.vectors(crystal.cell()));
        let reduced = short.map(f64::from) * supercell.matrix_f64();
        let to_reduced = reduced.try_inverse().unwrap_or_else(Matrix3::identity);
        let axis = -SEARCH_STEPS..=SEARCH_STEPS;
        let mut steps = Vec::new();
        for x in axis.clone() {
            for y in axis.clone() {
                for z in axis.clone() {
                    let step = Vector3::new(f64::from(x), f64::from(y), f64::from(z));
                    let translation = reduced.tr_mul(&step);
                    steps.push((to_integers(&translation), crystal.cartesian(&translation)));
                }
            }
        }
        Self {
            crystal,
            supercell,
            reduced,
            to_reduced,
            steps,
        }
    }

    /// All images of the pair within [`SEARCH_STEPS`] of the nearest, as (translation, squared distance in Å²).
    fn candidates(
        &self,
        cell: usize,
        displaced: usize,
        response: usize,
    ) -> impl Iterator<Item = (ImageTranslation, f64)> + '_ {
        let positions = self.crystal.positions();
        let offset = positions[response] - positions[displaced];
        let translation = self.supercell.translations()[cell];
        let start = Vector3::from(translation.map(|x| x as f64));
        let rounded = self.to_reduced.tr_mul(&(offset + start)).map(f64::round);
        let base = start - self.reduced.tr_mul(&rounded);
        let (base_image, base_vector) =
            (to_integers(&base), self.crystal.cartesian(&(offset + base)));
        self.steps.iter().map(move |(step, vector)| {
            let image = std::array::from_fn(|axis| base_image[axis] + step[axis]);
            (image, (base_vector + vector).norm_squared())
        })
    }

    fn nearest(
        &self,
        cell: usize,
        displaced: usize,
        response: usize,
        tie_tolerance_ang: f64,
    ) -> Vec<ImageTranslation> {
        let squares = self
            .candidates(cell, displaced, response)
            .map(|pair| pair.1);
        let shortest = squares.fold(f64::INFINITY, f64::min).sqrt();
        let limit = (shortest + tie_tolerance_ang).powi(2);
        let mut images: Vec<ImageTranslation> = self
            .candidates(cell, displaced, response)
            .filter(|(_, square)| *square <= limit)
            .map(|(image, _)| image)
            .collect();
        images.sort_unstable();
        images
    }

    fn inverse_power(&self, cell: usize, i: usize, j: usize) -> Vec<(ImageTranslation, f64)> {
        /// Images nearer than this are the atom itself, Å².
        const SAME_ATOM_ANG2: f64 = 1e-12;
        const SMALLEST_SHARE: f64 = 1e-3;
        let squares = self.candidates(cell, i, j).map(|pair| pair.1);
        let shortest = squares.fold(f64::INFINITY, f64::min);
        if shortest < SAME_ATOM_ANG2 {
            let own = self
                .candidates(cell, i, j)
                .find(|(_, square)| *square < SAME_ATOM_ANG2);
            return own.map(|(image, _)| vec![(image, 1.0)]).unwrap_or_default();
        }
        let mut shares: Vec<(ImageTranslation, f64)> = self
            .candidates(cell, i, j)
            .map(|(image, square)| (image, (shortest / square).powi(4)))
            .filter(|(_, share)| *share > SMALLEST_SHARE)
            .collect();
        let total: f64 = shares.iter().map(|pair| pair.1).sum();
        for pair in &mut shares {
            pair.1 /= total;
        }
        shares
    }
}

#[allow(
    clippy::cast_possible_truncation,
    reason = "translations and steps are bounded by the limits of Supercell, far below i32"
)]
fn to_integers(image: &Vector3<f64>) -> ImageTranslation {
    [
        image.x.round() as i32,
        image.y.round() as i32,
        image.z.round() as i32,
    ]
}
