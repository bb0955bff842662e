//! The two invented compounds and the geometry of their relaxed forms.

use nalgebra::{Matrix3, Vector3};

use crate::ModelError;
use crate::compound::{Bond, Bracing, Compound, Site};
use crate::molecular_crystal::MolecularCrystal;
use crate::relax::{TIGHT, relax};
use crate::symmetry::SpaceGroup;

/// Range of all contacts, Å.
const CUTOFF: f64 = 6.0;

/// Drosmelide: a three-ring of carbon, oxygen and sulphur; the carbon carries hydrogen and fluorine. The molecule is
/// chiral. Invented.
///
/// # Errors
/// Never with these symbols; a test builds it.
pub fn drosmelide() -> Result<Compound, ModelError> {
    let sites = vec![
        Site::new("C", [0.0, 0.0, 0.0], 1.80, 0.0060, 0.20)?,
        Site::new("H", [-0.514, -0.308, 0.910], 1.35, 0.0025, 0.16)?,
        Site::new("F", [-0.642, -0.384, -1.136], 1.55, 0.0050, -0.16)?,
        Site::new("O", [1.42, 0.0, 0.0], 1.62, 0.0080, -0.26)?,
        Site::new("S", [0.8587, 1.6047, 0.0], 1.95, 0.0180, 0.06)?,
    ];
    let bond = |i, j, stiffness| Bond {
        sites: (i, j),
        stiffness,
    };
    let bonds = [
        bond(0, 1, 30.0),
        bond(0, 2, 36.0),
        bond(0, 3, 34.0),
        bond(0, 4, 20.0),
        bond(3, 4, 22.0),
    ];
    let bracing = Bracing {
        two_bonds: 4.5,
        farther: 1.0,
        bond_softening: 1.8,
    };
    let name = "drosmelide";
    Ok(Compound::new(
        name,
        "thimble pair potential 1",
        sites,
        &bonds,
        bracing,
        CUTOFF,
    ))
}

/// Pelquonol: a twisted chain hydrogen–sulphur–oxygen–fluorine. Invented.
///
/// # Errors
/// Never with these symbols; a test builds it.
pub fn pelquonol() -> Result<Compound, ModelError> {
    let sites = vec![
        Site::new("H", [-0.1865, 1.327, 0.0], 1.35, 0.0025, 0.14)?,
        Site::new("S", [0.0, 0.0, 0.0], 1.95, 0.0180, 0.06)?,
        Site::new("O", [1.66, 0.0, 0.0], 1.62, 0.0080, -0.12)?,
        Site::new("F", [2.0569, 0.1207, 1.3789], 1.55, 0.0050, -0.08)?,
    ];
    let bond = |i, j, stiffness| Bond {
        sites: (i, j),
        stiffness,
    };
    let bonds = [bond(0, 1, 25.0), bond(1, 2, 24.0), bond(2, 3, 26.0)];
    let bracing = Bracing {
        two_bonds: 4.0,
        farther: 0.6,
        bond_softening: 1.7,
    };
    let name = "pelquonol";
    Ok(Compound::new(
        name,
        "thimble pair potential 1",
        sites,
        &bonds,
        bracing,
        CUTOFF,
    ))
}

/// Which of the two compounds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Substance {
    /// [`drosmelide`].
    Drosmelide,
    /// [`pelquonol`].
    Pelquonol,
}

impl Substance {
    /// The compound.
    ///
    /// # Errors
    /// Never; see [`drosmelide`].
    pub fn compound(self) -> Result<Compound, ModelError> {
        match self {
            Self::Drosmelide => drosmelide(),
            Self::Pelquonol => pelquonol(),
        }
    }
}

/// A polymorph: the geometry at which its forces and its stress vanish, found by `search-packings`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Form {
    /// Of what.
    pub substance: Substance,
    /// Its label.
    pub label: &'static str,
    /// Its space group.
    pub group: SpaceGroup,
    /// Rows are the cell vectors, Å.
    pub cell: [[f64; 3]; 3],
    /// One molecule, fractional; the group makes the others.
    pub molecule: &'static [[f64; 3]],
}

impl Form {
    /// The relaxed crystal. The geometry is stored to the last bit, so that nothing is left to relax; were the potential
    /// changed, the relaxation would find the form again.
    ///
    /// # Errors
    /// [`ModelError::NotRelaxed`] when the stored geometry does not belong to the potential.
    pub fn crystal(&self) -> Result<MolecularCrystal, ModelError> {
        let cell = Matrix3::from_fn(|r, c| self.cell[r][c]);
        let molecule: Vec<Vector3<f64>> = self.molecule.iter().map(|x| Vector3::from(*x)).collect();
        let compound = self.substance.compound()?;
        let start = MolecularCrystal::from_group(compound, self.group, cell, &molecule)?;
        relax(&start, self.group, TIGHT)
    }
}

/// Stable form, lowest at 0 K of the three that were computed well.
pub const DROSMELIDE_I: Form = Form {
    substance: Substance::Drosmelide,
    label: "I",
    group: SpaceGroup::P212121,
    cell: [
        [5.259_768_269_063_847, 0.0, 0.0],
        [0.0, 7.904_713_043_460_441, 0.0],
        [0.0, 0.0, 7.550_917_454_043_243],
    ],
    molecule: &[
        [
            0.930_951_741_384_777_2,
            0.313_996_285_288_968_3,
            0.211_840_419_733_094_67,
        ],
        [
            0.760_914_792_133_089_8,
            0.236_737_297_664_258_16,
            0.224_844_450_835_842_06,
        ],
        [
            0.931_387_861_381_536,
            0.416_244_898_766_379_43,
            0.066_300_004_312_232_28,
        ],
        [
            1.174_561_556_342_376_1,
            0.249_284_357_544_963_11,
            0.259_872_708_225_306_45,
        ],
        [
            1.076_837_501_990_934_9,
            0.391_458_910_337_891_15,
            0.414_639_284_911_898_3,
        ],
    ],
};

/// Stable form, lowest at room temperature of the three.
pub const DROSMELIDE_II: Form = Form {
    substance: Substance::Drosmelide,
    label: "II",
    group: SpaceGroup::P21n,
    cell: [
        [4.963_367_494_685_487, 0.0, 0.0],
        [0.0, 7.811_920_566_987_866, 0.0],
        [-0.378_131_145_825_365, 0.0, 8.480_848_946_117_82],
    ],
    molecule: &[
        [
            0.626_819_182_430_230_3,
            0.193_301_723_756_854_06,
            0.695_820_279_724_238_4,
        ],
        [
            0.506_411_016_029_413_3,
            0.307_070_343_519_725_06,
            0.715_340_805_669_675_8,
        ],
        [
            0.482_856_138_971_134_9,
            0.044_563_264_441_454_864,
            0.691_555_053_922_253_9,
        ],
        [
            0.893_490_659_863_548_8,
            0.180_481_228_347_486_8,
            0.764_737_144_633_902_6,
        ],
        [
            0.908_211_773_930_146_4,
            0.214_507_506_362_166_2,
            0.567_221_246_679_196_9,
        ],
    ],
};

/// Stable form, overtakes form I below 500 K.
pub const DROSMELIDE_III: Form = Form {
    substance: Substance::Drosmelide,
    label: "III",
    group: SpaceGroup::P21n,
    cell: [
        [7.776_157_862_360_935, 0.0, 0.0],
        [0.0, 7.852_248_582_700_208, 0.0],
        [-1.565_344_009_474_728, 0.0, 4.779_342_427_844_617],
    ],
    molecule: &[
        [
            0.320_232_763_470_722_6,
            0.194_049_124_420_107_7,
            0.554_711_601_176_666,
        ],
        [
            0.182_880_531_118_943_87,
            0.152_676_135_191_978_42,
            0.532_638_464_186_836_7,
        ],
        [
            0.450_523_196_360_922_86,
            0.094_052_894_958_410_3,
            0.728_959_704_101_906_2,
        ],
        [
            0.361_256_917_447_352_1,
            0.371_186_300_313_831_4,
            0.558_405_066_872_948_1,
        ],
        [
            0.360_377_439_354_658_27,
            0.285_485_155_619_675_25,
            0.247_233_490_767_622_74,
        ],
    ],
};

/// Stable form with a thin cell.
pub const DROSMELIDE_IV: Form = Form {
    substance: Substance::Drosmelide,
    label: "IV",
    group: SpaceGroup::P21,
    cell: [
        [4.843_801_463_407_727, 0.0, 0.0],
        [0.0, 7.555_596_597_740_013, 0.0],
        [-2.249_913_460_917_463_6, 0.0, 4.226_009_596_277_436],
    ],
    molecule: &[
        [
            0.672_380_583_874_876_2,
            0.124_569_205_618_915_53,
            1.016_770_057_822_040_4,
        ],
        [
            0.769_652_247_019_943_7,
            0.045_885_935_078_576_09,
            1.232_105_395_475_026,
        ],
        [
            0.850_111_260_868_366_4,
            0.267_731_110_037_005_3,
            1.031_044_251_573_212_8,
        ],
        [
            0.342_354_871_054_005_97,
            0.145_905_569_674_265_38,
            0.835_079_549_597_929_3,
        ],
        [
            0.472_425_904_868_267_85,
            0.007_761_118_433_000_366,
            0.641_203_790_090_250_4,
        ],
    ],
};

/// A saddle: relaxed within its space group, unstable at the zone boundary along a*.
pub const DROSMELIDE_V: Form = Form {
    substance: Substance::Drosmelide,
    label: "V",
    group: SpaceGroup::P21c,
    cell: [
        [4.911_916_801_305_129, 0.0, 0.0],
        [0.0, 7.778_431_921_025_84, 0.0],
        [-0.528_438_268_787_561_8, 0.0, 9.628_669_770_582_453],
    ],
    molecule: &[
        [
            0.641_875_942_648_962_6,
            0.832_674_059_504_788_3,
            0.255_338_250_475_205_75,
        ],
        [
            0.749_869_311_279_470_9,
            0.902_931_335_689_391_1,
            0.338_944_943_171_536_3,
        ],
        [
            0.367_915_391_424_561_76,
            0.818_922_974_435_876,
            0.269_407_651_233_684_2,
        ],
        [
            0.765_622_088_142_652_8,
            0.688_324_328_287_931_7,
            0.192_810_365_187_879_25,
        ],
        [
            0.762_918_382_079_058_7,
            0.858_451_936_080_979_9,
            0.081_678_585_424_563_05,
        ],
    ],
};

/// Stable form, lowest at 0 K.
pub const PELQUONOL_ALPHA: Form = Form {
    substance: Substance::Pelquonol,
    label: "alpha",
    group: SpaceGroup::P21c,
    cell: [
        [7.571_758_766_951_832, 0.0, 0.0],
        [0.0, 4.837_550_500_457_283, 0.0],
        [-3.655_868_308_503_344, 0.0, 6.529_751_223_025_261_5],
    ],
    molecule: &[
        [
            0.336_880_250_976_689_5,
            0.381_413_012_989_479_94,
            0.459_180_207_894_234_64,
        ],
        [
            0.186_898_164_069_293_72,
            0.383_491_814_197_861_27,
            0.264_980_441_789_841_15,
        ],
        [
            0.239_583_671_952_505_4,
            0.681_063_345_212_257_4,
            0.190_475_253_254_161_26,
        ],
        [
            0.383_154_216_696_421_6,
            0.616_354_058_281_616_7,
            0.123_134_825_196_989_23,
        ],
    ],
};

/// Stable form, lowest at room temperature by a hair.
pub const PELQUONOL_BETA: Form = Form {
    substance: Substance::Pelquonol,
    label: "beta",
    group: SpaceGroup::PBar1,
    cell: [
        [6.746_078_115_697_04, 0.0, 0.0],
        [-0.195_317_100_472_324_15, 3.901_651_718_409_542_3, 0.0],
        [
            0.653_334_485_665_242,
            -1.391_351_048_157_954_5,
            4.585_352_895_348_889,
        ],
    ],
    molecule: &[
        [
            0.831_843_292_377_314_4,
            0.594_466_158_371_060_3,
            1.193_508_639_889_420_4,
        ],
        [
            0.689_315_371_395_415_1,
            0.340_273_048_040_550_14,
            1.164_239_203_373_803_4,
        ],
        [
            0.727_407_928_646_104_9,
            0.166_383_428_654_719_06,
            0.804_352_117_269_417,
        ],
        [
            0.876_399_523_500_618,
            -0.104_919_219_925_273_88,
            0.746_022_196_767_842_3,
        ],
    ],
};

/// All forms of the scenario.
pub const ALL: [Form; 7] = [
    DROSMELIDE_I,
    DROSMELIDE_II,
    DROSMELIDE_III,
    DROSMELIDE_IV,
    DROSMELIDE_V,
    PELQUONOL_ALPHA,
    PELQUONOL_BETA,
];
