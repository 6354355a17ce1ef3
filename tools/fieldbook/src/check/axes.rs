//! Round numbers for axes, and numbers as short text.

/// A round step, 1, 2 or 5 times a power of ten, that divides `span` into at most `most` parts.
pub(super) fn step(span: f64, most: f64) -> f64 {
    if !(span > 0.0 && span.is_finite()) {
        return 1.0;
    }
    let raw = span / most;
    let power = 10_f64.powf(raw.log10().floor());
    [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|round| round * power)
        .find(|step| *step >= raw * 0.999_999)
        .unwrap_or(raw)
}

/// The multiples of `step` from `low` to `high`.
pub(super) fn ticks(low: f64, high: f64, step: f64) -> impl Iterator<Item = f64> {
    let (first, last) = ((low / step - 1e-9).ceil(), (high / step + 1e-9).floor());
    let count = if last >= first { (last - first) as usize + 1 } else { 0 };
    (0..count).map(move |index| (first + index as f64) * step)
}

/// A number with as many decimals as `step` needs.
pub(super) fn label(value: f64, step: f64) -> String {
    let decimals = (-step.log10().floor()).clamp(0.0, 9.0) as usize;
    let text = format!("{value:.decimals$}");
    if text.trim_start_matches('-').chars().all(|letter| letter == '0' || letter == '.') {
        return text.trim_start_matches('-').to_owned();
    }
    text.replace('-', "−")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_are_round_and_ticks_lie_inside() {
        assert_eq!(step(10.0, 6.0), 2.0);
        assert!((step(0.7, 6.0) - 0.2).abs() < 1e-12);
        assert_eq!(step(0.0, 6.0), 1.0);
        assert_eq!(ticks(-3.0, 4.1, 2.0).collect::<Vec<_>>(), [-2.0, 0.0, 2.0, 4.0]);
        assert_eq!(ticks(1.0, 0.0, 2.0).count(), 0);
        assert_eq!(
            (label(-0.0, 0.2), label(-1.5, 0.5), label(20.0, 5.0)),
            ("0.0".into(), "−1.5".into(), "20".into())
        );
    }
}
