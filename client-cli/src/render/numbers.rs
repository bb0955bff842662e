//! Numbers as a practitioner reads them.

/// A measured quantity: plain between 0.001 and 100 000, else with a power of ten; four significant digits.
pub fn quantity(value: f64) -> String {
    let size = value.abs();
    if value == 0.0 {
        "0".to_owned()
    } else if !value.is_finite() {
        value.to_string()
    } else if (1e-3..1e5).contains(&size) {
        trimmed(&format!("{value:.*}", decimals_for(size)))
    } else {
        power_of_ten(value)
    }
}

/// Decimals that give four significant digits to a number of this size.
fn decimals_for(size: f64) -> usize {
    [
        (1000.0, 0),
        (100.0, 1),
        (10.0, 2),
        (1.0, 3),
        (0.1, 4),
        (0.01, 5),
    ]
    .into_iter()
    .find(|(from, _)| size >= *from)
    .map_or(6, |(_, decimals)| decimals)
}

fn power_of_ten(value: f64) -> String {
    let text = format!("{value:.2e}");
    match text.split_once('e') {
        Some((digits, power)) => format!("{}e{power}", trimmed(digits)),
        None => text,
    }
}

fn trimmed(text: &str) -> String {
    if text.contains('.') {
        text.trim_end_matches('0').trim_end_matches('.').to_owned()
    } else {
        text.to_owned()
    }
}

/// A quantity with its unit; a pure number has none.
pub fn with_unit(value: f64, unit: &str) -> String {
    if unit.is_empty() {
        quantity(value)
    } else {
        format!("{} {}", quantity(value), pretty_unit(unit))
    }
}

/// A unit of the contract in the signs of the trade.
pub fn pretty_unit(unit: &str) -> String {
    unit.replace("angstrom", "Å")
        .replace("^-1", "⁻¹")
        .replace("^2", "²")
        .replace("^3", "³")
}

/// A wavenumber in cm⁻¹; an imaginary one, negative on the wire, ends with `i`.
pub fn wavenumber(per_cm: f64) -> String {
    if per_cm < 0.0 {
        format!("{:.1}i", -per_cm)
    } else {
        format!("{per_cm:.1}")
    }
}

/// A wave vector in fractional reciprocal coordinates; simple fractions are written as such.
pub fn wave_vector(q: &[f64]) -> String {
    let parts: Vec<String> = q.iter().map(|part| fraction(*part)).collect();
    format!("({})", parts.join(", "))
}

/// Largest denominator written as a fraction.
const DENOMINATOR_MAX: u8 = 12;

fn fraction(value: f64) -> String {
    if value.abs() < 1e-9 {
        return "0".to_owned();
    }
    for denominator in 1..=DENOMINATOR_MAX {
        let numerator = value * f64::from(denominator);
        if (numerator - numerator.round()).abs() < 1e-6 {
            return if denominator == 1 {
                format!("{numerator:.0}")
            } else {
                format!("{numerator:.0}/{denominator}")
            };
        }
    }
    format!("{value:.3}")
}

/// A temperature, K, without needless decimals.
pub fn temperature(kelvin: f64) -> String {
    trimmed(&format!("{kelvin:.2}"))
}

/// A size in bytes, in powers of 1024.
pub fn bytes(count: u64) -> String {
    const UNITS: [&str; 5] = ["B", "KiB", "MiB", "GiB", "TiB"];
    let mut value = count as f64;
    let mut unit = UNITS[0];
    for next in UNITS.into_iter().skip(1) {
        if value < 1024.0 {
            break;
        }
        value /= 1024.0;
        unit = next;
    }
    if unit == "B" {
        format!("{count} B")
    } else {
        format!("{value:.1} {unit}")
    }
}

/// A count with its noun, in the right number.
pub fn counted(count: usize, singular: &str, plural: &str) -> String {
    format!("{count} {}", if count == 1 { singular } else { plural })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn quantities_keep_four_digits_and_change_notation_at_the_ends() {
        for (value, text) in [
            (0.0, "0"),
            (1.0, "1"),
            (0.001, "0.001"),
            (0.000_999, "9.99e-4"),
            (2.1e-7, "2.1e-7"),
            (-12.345_6, "-12.35"),
            (1234.4, "1234"),
            (99_999.0, "99999"),
            (100_000.0, "1e5"),
            (f64::INFINITY, "inf"),
        ] {
            assert_eq!(quantity(value), text);
        }
        assert_eq!(with_unit(0.5, "eV/angstrom^2"), "0.5 eV/Å²");
        assert_eq!(with_unit(0.5, ""), "0.5");
    }

    #[test]
    fn imaginary_wavenumbers_carry_an_i_and_no_sign() {
        assert_eq!(wavenumber(-12.34), "12.3i");
        assert_eq!(wavenumber(45.0), "45.0");
    }

    #[test]
    fn wave_vectors_are_fractions_where_they_are_simple() {
        assert_eq!(wave_vector(&[0.5, 0.0, -1.0 / 3.0]), "(1/2, 0, -1/3)");
        assert_eq!(wave_vector(&[0.123_456, 1.0, 0.25]), "(0.123, 1, 1/4)");
    }

    #[test]
    fn sizes_and_temperatures() {
        assert_eq!(bytes(1023), "1023 B");
        assert_eq!(bytes(1024), "1.0 KiB");
        assert_eq!(bytes(3 << 30), "3.0 GiB");
        assert_eq!(temperature(300.0), "300");
        assert_eq!(temperature(298.15), "298.15");
    }
}
