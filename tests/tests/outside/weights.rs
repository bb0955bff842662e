//! Atomic weights against the table of the IUPAC (`reference/atomic_weights.csv`: Prohaska et al.,
//! Pure Appl. Chem. 94, 573 (2022)).

use tarehouse_physics::Element;

use crate::reference::{assert_near, number, rows};

#[test]
fn standard_weights_are_those_of_the_table() {
    let table = rows(include_str!("../../reference/atomic_weights.csv"));
    assert!(table.len() > 50);
    for row in &table {
        let element = Element::from_symbol(row["symbol"]).unwrap();
        let protons: u8 = row["Z"].parse().unwrap();
        assert_eq!(element.atomic_number(), protons, "{element}");
        if row["full"].is_empty() {
            assert_eq!(element.standard_weight_u(), None, "{element}");
        } else {
            let weight = element.standard_weight_u().unwrap();
            assert_near(row["symbol"], weight, number(row, "full"), 0.0, 1e-12);
            // The abridged column is rounded to five figures.
            assert_near(row["symbol"], weight, number(row, "abridged"), 6e-5, 0.0);
        }
    }
}
