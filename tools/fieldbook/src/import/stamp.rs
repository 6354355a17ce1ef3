//! Times as text: decimal numbers of which differences keep their digits, and dates after RFC 3339.

/// A decimal number, its whole part kept apart so that the difference of two large ones loses nothing.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stamp {
    value: f64,
    whole: i64,
    fraction: f64,
}

impl Stamp {
    /// Reads a finite number.
    pub fn parse(text: &str) -> Option<Self> {
        let text = text.trim();
        let value: f64 = text.parse().ok().filter(|value: &f64| value.is_finite())?;
        let (whole, fraction) = text.split_once('.').unwrap_or((text, ""));
        let exact = whole.parse::<i64>().ok().filter(|_| fraction.bytes().all(|byte| byte.is_ascii_digit()));
        let Some(whole_number) = exact else { return Some(Self { value, whole: 0, fraction: value }) };
        let fraction: f64 = format!("0.{fraction}0").parse().ok()?;
        let sign = if whole.starts_with('-') { -1.0 } else { 1.0 };
        Some(Self { value, whole: whole_number, fraction: sign * fraction })
    }

    /// Reads a date and time after RFC 3339, like `2026-05-04T10:00:00.250Z`, as seconds since 1970. Leap seconds count
    /// as the second before.
    pub fn parse_date(text: &str) -> Option<Self> {
        let text = text.trim();
        let (date, rest) = text.split_once(['T', 't', ' '])?;
        let [year, month, day] = numbers(date, '-')?;
        let split = rest.find(['Z', 'z', '+', '-'])?;
        let (clock, zone) = rest.split_at(split);
        let (clock, fraction) = clock.split_once('.').unwrap_or((clock, ""));
        let [hour, minute, second] = numbers(clock, ':')?;
        let fits = (1..=12).contains(&month)
            && (1..=31).contains(&day)
            && (0..24).contains(&hour)
            && (0..60).contains(&minute)
            && (0..=60).contains(&second)
            && fraction.bytes().all(|byte| byte.is_ascii_digit());
        if !fits {
            return None;
        }
        let seconds = hour * 3600 + minute * 60 + second.min(59) - zone_s(zone)?;
        let whole = days_since_1970(year, month, day) * 86_400 + seconds;
        let fraction: f64 = format!("0.{fraction}0").parse().ok()?;
        Some(Self { value: whole as f64 + fraction, whole, fraction })
    }

    /// The number.
    pub fn value(self) -> f64 {
        self.value
    }

    /// This one minus `earlier`.
    pub fn since(self, earlier: Self) -> f64 {
        self.whole.wrapping_sub(earlier.whole) as f64 + (self.fraction - earlier.fraction)
    }
}

fn numbers(text: &str, mark: char) -> Option<[i64; 3]> {
    let parts: Vec<i64> = text
        .split(mark)
        .map(|part| part.bytes().all(|byte| byte.is_ascii_digit()).then(|| part.parse().ok()).flatten())
        .collect::<Option<_>>()?;
    parts.try_into().ok()
}

fn zone_s(zone: &str) -> Option<i64> {
    if matches!(zone, "Z" | "z") {
        return Some(0);
    }
    let sign = if zone.starts_with('-') { -1 } else { 1 };
    let (hours, minutes) = zone.get(1..)?.split_once(':')?;
    Some(sign * (hours.parse::<u8>().ok()? as i64 * 3600 + minutes.parse::<u8>().ok()? as i64 * 60))
}

/// Days of the proleptic Gregorian calendar. Years begin in March here, so that the leap day is the last one.
fn days_since_1970(year: i64, month: i64, day: i64) -> i64 {
    let year = if month <= 2 { year - 1 } else { year };
    let month_from_march = (month + 9) % 12;
    let day_of_year = (153 * month_from_march + 2) / 5 + day - 1;
    let leap_days = year.div_euclid(4) - year.div_euclid(100) + year.div_euclid(400);
    365 * year + leap_days + day_of_year - 719_468
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_read_as_std_reads_them() {
        for text in ["0", "-0.25", "12.5", "+3", "1e3", "-1.5e-3", "1760000000.125", ".5", "-.5", "7."] {
            assert_eq!(Stamp::parse(text).map(Stamp::value), text.parse().ok(), "{text}");
        }
        for text in ["", "nan", "inf", "1e999", "1.2.3", "12a", "0x10", "--1"] {
            assert_eq!(Stamp::parse(text), None, "{text}");
        }
    }

    #[test]
    fn dates_are_seconds_since_1970() {
        // The example of RFC 3339, section 5.8, and the same instants in UTC; 2000-03-01 is 11 017 days after 1970.
        let value = |text| Stamp::parse_date(text).map(Stamp::value);
        assert_eq!(value("1996-12-19T16:39:57-08:00"), value("1996-12-20T00:39:57Z"));
        assert_eq!(value("1970-01-01T00:00:00Z"), Some(0.0));
        assert_eq!(value("2000-03-01T00:00:01.5Z"), Some(11_017.0 * 86_400.0 + 1.5));
        assert_eq!(value("1985-04-12T23:20:50.52Z"), Some(482_196_050.52));
        for wrong in ["", "2026-05-04", "2026-13-04T10:00:00Z", "2026-05-04T10:00:00", "2026-05-04T10:00Z"] {
            assert_eq!(value(wrong), None, "{wrong}");
        }
    }
}
