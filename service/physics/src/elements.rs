//! Chemical elements: symbols, standard atomic weights and covalent radii.
//!
//! Weights: IUPAC standard atomic weights 2021 (Prohaska et al., Pure Appl. Chem. 94, 573 (2022)); where the
//! standard gives an interval, its conventional value. `D` is hydrogen-2 with its nuclide mass.
//! Radii: Cordero et al., Dalton Trans. 2008, 2832. Both were read from the data package `periodictable` 2.1.0.
//!
//! Elements without a standard atomic weight (Tc, Pm, Po and beyond, except Th, Pa, U) need declared masses.

use std::fmt;

/// A chemical element, or deuterium. Obtain one with [`Element::from_symbol`].
#[derive(Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Element(u8);

impl Element {
    /// The element with this symbol; `D` is deuterium. `None` for anything that is not in the table.
    pub fn from_symbol(symbol: &str) -> Option<Self> {
        let index = TABLE.iter().position(|row| row.symbol == symbol)?;
        u8::try_from(index).ok().map(Self)
    }

    /// The symbol, as in `"C"`.
    pub fn symbol(self) -> &'static str {
        self.row().symbol
    }

    /// The number of protons; 1 for H and D alike.
    pub fn atomic_number(self) -> u8 {
        self.row().atomic_number
    }

    /// Standard atomic weight in unified atomic mass units, where one exists.
    pub fn standard_weight_u(self) -> Option<f64> {
        let weight = self.row().weight_u;
        (weight > 0.0).then_some(weight)
    }

    /// Single-bond covalent radius in Å.
    pub fn covalent_radius_angstrom(self) -> f64 {
        self.row().covalent_radius_angstrom
    }

    /// All elements of the table, D first.
    pub fn all() -> impl Iterator<Item = Self> {
        (0..).take(TABLE.len()).map(Self)
    }

    fn row(self) -> &'static Row {
        &TABLE[usize::from(self.0)]
    }
}

impl fmt::Debug for Element {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.symbol())
    }
}

impl fmt::Display for Element {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.symbol())
    }
}

struct Row {
    symbol: &'static str,
    atomic_number: u8,
    weight_u: f64,
    covalent_radius_angstrom: f64,
}

const NO_STANDARD_WEIGHT: f64 = 0.0;

const fn row(
    symbol: &'static str,
    atomic_number: u8,
    weight_u: f64,
    covalent_radius_angstrom: f64,
) -> Row {
    Row {
        symbol,
        atomic_number,
        weight_u,
        covalent_radius_angstrom,
    }
}

static TABLE: [Row; 97] = [
    row("D", 1, 2.014_101_777_84, 0.31),
    row("H", 1, 1.008, 0.31),
    row("He", 2, 4.002_602, 0.28),
    row("Li", 3, 6.94, 1.28),
    row("Be", 4, 9.012_183_1, 0.96),
    row("B", 5, 10.81, 0.84),
    row("C", 6, 12.011, 0.76),
    row("N", 7, 14.007, 0.71),
    row("O", 8, 15.999, 0.66),
    row("F", 9, 18.998_403_162, 0.57),
    row("Ne", 10, 20.1797, 0.58),
    row("Na", 11, 22.989_769_28, 1.66),
    row("Mg", 12, 24.305, 1.41),
    row("Al", 13, 26.981_538_4, 1.21),
    row("Si", 14, 28.085, 1.11),
    row("P", 15, 30.973_761_998, 1.07),
    row("S", 16, 32.06, 1.05),
    row("Cl", 17, 35.45, 1.02),
    row("Ar", 18, 39.95, 1.06),
    row("K", 19, 39.0983, 2.03),
    row("Ca", 20, 40.078, 1.76),
    row("Sc", 21, 44.955_907, 1.7),
    row("Ti", 22, 47.867, 1.6),
    row("V", 23, 50.9415, 1.53),
    row("Cr", 24, 51.9961, 1.39),
    row("Mn", 25, 54.938_043, 1.39),
    row("Fe", 26, 55.845, 1.32),
    row("Co", 27, 58.933_194, 1.26),
    row("Ni", 28, 58.6934, 1.24),
    row("Cu", 29, 63.546, 1.32),
    row("Zn", 30, 65.38, 1.22),
    row("Ga", 31, 69.723, 1.22),
    row("Ge", 32, 72.63, 1.2),
    row("As", 33, 74.921_595, 1.19),
    row("Se", 34, 78.971, 1.2),
    row("Br", 35, 79.904, 1.2),
    row("Kr", 36, 83.798, 1.16),
    row("Rb", 37, 85.4678, 2.2),
    row("Sr", 38, 87.62, 1.95),
    row("Y", 39, 88.905_838, 1.9),
    row("Zr", 40, 91.224, 1.75),
    row("Nb", 41, 92.90637, 1.64),
    row("Mo", 42, 95.95, 1.54),
    row("Tc", 43, NO_STANDARD_WEIGHT, 1.47),
    row("Ru", 44, 101.07, 1.46),
    row("Rh", 45, 102.90549, 1.42),
    row("Pd", 46, 106.42, 1.39),
    row("Ag", 47, 107.8682, 1.45),
    row("Cd", 48, 112.414, 1.44),
    row("In", 49, 114.818, 1.42),
    row("Sn", 50, 118.71, 1.39),
    row("Sb", 51, 121.76, 1.39),
    row("Te", 52, 127.6, 1.38),
    row("I", 53, 126.90447, 1.39),
    row("Xe", 54, 131.293, 1.4),
    row("Cs", 55, 132.905_451_96, 2.44),
    row("Ba", 56, 137.327, 2.15),
    row("La", 57, 138.90547, 2.07),
    row("Ce", 58, 140.116, 2.04),
    row("Pr", 59, 140.90766, 2.03),
    row("Nd", 60, 144.242, 2.01),
    row("Pm", 61, NO_STANDARD_WEIGHT, 1.99),
    row("Sm", 62, 150.36, 1.98),
    row("Eu", 63, 151.964, 1.98),
    row("Gd", 64, 157.25, 1.96),
    row("Tb", 65, 158.925_354, 1.94),
    row("Dy", 66, 162.5, 1.92),
    row("Ho", 67, 164.930_329, 1.92),
    row("Er", 68, 167.259, 1.89),
    row("Tm", 69, 168.934_219, 1.9),
    row("Yb", 70, 173.045, 1.87),
    row("Lu", 71, 174.9668, 1.87),
    row("Hf", 72, 178.486, 1.75),
    row("Ta", 73, 180.94788, 1.7),
    row("W", 74, 183.84, 1.62),
    row("Re", 75, 186.207, 1.51),
    row("Os", 76, 190.23, 1.44),
    row("Ir", 77, 192.217, 1.41),
    row("Pt", 78, 195.084, 1.36),
    row("Au", 79, 196.96657, 1.36),
    row("Hg", 80, 200.592, 1.32),
    row("Tl", 81, 204.38, 1.45),
    row("Pb", 82, 207.2, 1.46),
    row("Bi", 83, 208.9804, 1.48),
    row("Po", 84, NO_STANDARD_WEIGHT, 1.4),
    row("At", 85, NO_STANDARD_WEIGHT, 1.5),
    row("Rn", 86, NO_STANDARD_WEIGHT, 1.5),
    row("Fr", 87, NO_STANDARD_WEIGHT, 2.6),
    row("Ra", 88, NO_STANDARD_WEIGHT, 2.21),
    row("Ac", 89, NO_STANDARD_WEIGHT, 2.15),
    row("Th", 90, 232.0377, 2.06),
    row("Pa", 91, 231.03588, 2.0),
    row("U", 92, 238.02891, 1.96),
    row("Np", 93, NO_STANDARD_WEIGHT, 1.9),
    row("Pu", 94, NO_STANDARD_WEIGHT, 1.87),
    row("Am", 95, NO_STANDARD_WEIGHT, 1.8),
    row("Cm", 96, NO_STANDARD_WEIGHT, 1.69),
];
