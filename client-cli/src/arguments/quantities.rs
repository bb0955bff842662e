//! Temperatures and pressures as people write them, with or without their unit.

/// A temperature in K, as in `298.15` or `298.15K`.
pub(super) fn kelvin(text: &str) -> Result<f64, String> {
    not_negative(text, "K").map_err(|fault| match fault {
        Fault::OutOfRange => "a temperature is finite and not below 0 K".to_owned(),
        Fault::NoNumber => "expected a number of kelvin, such as 298.15".to_owned(),
    })
}

/// A pressure in GPa, as in `0.5` or `0.5GPa`.
pub(super) fn gigapascal(text: &str) -> Result<f64, String> {
    not_negative(text, "GPa").map_err(|fault| match fault {
        Fault::OutOfRange => "a pressure is finite and not below 0 GPa".to_owned(),
        Fault::NoNumber => "expected a number of gigapascal, such as 0.5".to_owned(),
    })
}

enum Fault {
    OutOfRange,
    NoNumber,
}

fn not_negative(text: &str, unit: &str) -> Result<f64, Fault> {
    let number = text.trim().trim_end_matches(unit).trim_end();
    let value: f64 = number.parse().map_err(|_| Fault::NoNumber)?;
    let in_range = value.is_finite() && value >= 0.0;
    in_range.then_some(value).ok_or(Fault::OutOfRange)
}
