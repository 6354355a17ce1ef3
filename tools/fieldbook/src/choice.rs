//! `--law` and `--gain`: which law follows, with which gains.

use trackhold_core::keys::Problem;
use trackhold_core::keys::Values;
use trackhold_core::law;
use trackhold_core::settings::{LawSettings, Settings};

/// Chooses another law than the site file's, or other gains.
#[derive(Clone, Debug, Default, clap::Args)]
pub struct LawChoice {
    /// Law to follow with. Another one than the site's drops the site's gains: its defaults count, then --gain.
    #[arg(long, value_name = "NAME")]
    pub law: Option<String>,
    /// A gain of the law, or damping, settling_distance_m, bandwidth_rad_s; may be given several times. A gain that is
    /// neither named nor determined by one of those keeps its value, or its default.
    #[arg(long = "gain", value_name = "KEY=VALUE", value_parser = parse_gain, allow_negative_numbers = true)]
    pub gains: Vec<(String, f64)>,
}

impl LawChoice {
    /// True if anything is chosen.
    pub fn is_given(&self) -> bool {
        self.law.is_some() || !self.gains.is_empty()
    }

    /// The settings with this choice, checked.
    ///
    /// # Errors
    /// What does not hold: no such law, no such gain, a value outside its bound.
    pub fn apply(&self, settings: &Settings) -> Result<Settings, Vec<Problem>> {
        // Checked by itself first: a message about "--gain" should not be mixed with what else is wrong.
        let law = self.over(&settings.law)?;
        let chosen = Settings { law, ..settings.clone() };
        Ok(chosen.checked()?.settings)
    }

    /// A law with this choice over it; its gains checked, but not whether it is made for a machine.
    ///
    /// # Errors
    /// What does not hold: no such law, no such gain, a value outside its bound.
    pub fn over(&self, law: &LawSettings) -> Result<LawSettings, Vec<Problem>> {
        let same = self.law.as_ref().is_none_or(|name| *name == law.name);
        let name = self.law.clone().unwrap_or_else(|| law.name.clone());
        let kept = if same { law.gains.clone() } else { Values::default() };
        let mut given = Values::default();
        self.gains.iter().for_each(|(key, value)| given.set(key, *value));
        let gains = law::changed(&name, &kept, &given).map_err(|problem| vec![problem]);
        let checked = gains.and_then(|gains| law::check(&name, &gains).map(|()| gains));
        match checked {
            Ok(gains) => Ok(LawSettings { name, gains }),
            Err(problems) => Err(problems.into_iter().map(|problem| problem.within("law")).collect()),
        }
    }
}

/// Problems as one text, a line each.
pub fn problem_lines(problems: &[Problem]) -> String {
    problems.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n  ")
}

fn parse_gain(text: &str) -> Result<(String, f64), String> {
    let (key, value) = text.split_once('=').ok_or("write KEY=VALUE, for example k_y=4")?;
    match value.trim().parse::<f64>() {
        Ok(value) if value.is_finite() => Ok((key.trim().to_owned(), value)),
        _ => Err(format!("{value:?} is not a number")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn settings() -> Settings {
        let mut settings = Settings::default();
        settings.vehicle.kind = "unicycle".to_owned();
        for (key, value) in [
            ("max_speed_m_s", 1.0),
            ("max_turn_rate_rad_s", 2.0),
            ("max_accel_m_s2", 1.0),
            ("max_turn_accel_rad_s2", 4.0),
        ] {
            settings.vehicle.values.set(key, value);
        }
        settings.law.name = "kanayama".to_owned();
        settings.law.gains.set("k_x", 7.0);
        settings
    }

    fn chosen(law: Option<&str>, gains: &[(&str, f64)]) -> Result<LawSettings, Vec<Problem>> {
        let gains = gains.iter().map(|(key, value)| ((*key).to_owned(), *value)).collect();
        LawChoice { law: law.map(str::to_owned), gains }.apply(&settings()).map(|settings| settings.law)
    }

    #[test]
    fn the_same_law_keeps_the_sites_gains_and_gain_goes_over_them() {
        let law = chosen(Some("kanayama"), &[("k_y", 9.0)]).unwrap();
        assert_eq!((law.gains.get("k_x"), law.gains.get("k_y")), (7.0, 9.0));
        assert_eq!(chosen(None, &[("k_x", 3.0)]).unwrap().gains.get("k_x"), 3.0);
    }

    #[test]
    fn another_law_drops_the_sites_gains() {
        let law = chosen(Some("samson"), &[("k_1", 2.0)]).unwrap();
        assert_eq!(law.name, "samson");
        assert_eq!((law.gains.get("k_1"), law.gains.find("k_x")), (2.0, None));
        assert!(law.gains.get("k_2") > 0.0, "defaults are filled in");
    }

    #[test]
    fn a_design_key_takes_the_place_of_the_sites_gains_that_it_determines() {
        let law = chosen(None, &[("bandwidth_rad_s", 1.5), ("damping", 1.0)]).unwrap();
        // At half the top speed, 0.5 m/s: 3 1/m.
        assert_eq!(["k_x", "k_y", "k_heading"].map(|gain| law.gains.get(gain)), [1.5, 9.0, 6.0]);
        assert_eq!(law.gains.find("bandwidth_rad_s"), None, "the settings keep raw gains only");
        let problems = chosen(None, &[("bandwidth_rad_s", 1.5), ("k_x", 2.0)]).unwrap_err();
        assert!(problem_lines(&problems).contains("law.gains.k_x: given together with bandwidth_rad_s"));
    }

    #[test]
    fn an_unknown_gain_is_refused_naming_the_known_ones() {
        let problems = chosen(Some("samson"), &[("k_x", 2.0)]).unwrap_err();
        assert_eq!(
            problem_lines(&problems),
            "law.gains.k_x: no such key here; known are k_1, k_2, k_3, k_i, damping, settling_distance_m, bandwidth_rad_s, \
             design_speed_m_s"
        );
        assert!(problem_lines(&chosen(Some("none"), &[]).unwrap_err()).contains("kanayama"));
    }

    #[test]
    fn a_gain_is_a_key_and_a_number() {
        assert_eq!(parse_gain("k_y = 4.5"), Ok(("k_y".to_owned(), 4.5)));
        for wrong in ["k_y", "k_y=", "k_y=much", "k_y=NaN", "k_y=inf"] {
            assert!(parse_gain(wrong).is_err(), "{wrong}");
        }
    }
}
