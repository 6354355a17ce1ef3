//! The mode table: one pure function, the only place where modes follow from one another.
//!
//! | in | start | controlled stop | emergency stop | reset | guard: controlled | guard: protective | came to rest |
//! | --- | --- | --- | --- | --- | --- | --- | --- |
//! | standby | tracking | – | emergency-stop | – | – | – | – |
//! | tracking | refused | controlled-stop | emergency-stop | refused | controlled-stop | protective-stop | standby |
//! | controlled-stop | refused | – | emergency-stop | refused | – | protective-stop | standby |
//! | protective-stop | refused | – | emergency-stop | standby | – | – | – |
//! | emergency-stop | refused | – | – | standby | – | – | – |
//!
//! A start is tried only after every start gate has passed, a reset only once the stop's cause is gone. A reset never
//! moves the machine; a start is a separate order (ISO 13850).

use trackhold_proto::words::Mode;

/// What asks for a change of mode.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Trigger {
    /// An operator's start whose gates have passed.
    Start,
    /// An operator's controlled stop.
    ControlledStop,
    /// An emergency stop.
    EmergencyStop,
    /// A reset, the cause being gone.
    Reset,
    /// A guard that asks for a controlled stop.
    GuardControlled,
    /// A guard that asks for a protective stop: stale pose and stalled loop among them.
    GuardProtective,
    /// The plan ended at rest, or a ramp reached zero.
    CameToRest,
}

impl Trigger {
    /// All triggers.
    pub const ALL: [Self; 7] = [
        Self::Start,
        Self::ControlledStop,
        Self::EmergencyStop,
        Self::Reset,
        Self::GuardControlled,
        Self::GuardProtective,
        Self::CameToRest,
    ];
}

/// What the table says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Verdict {
    /// To this mode.
    To(Mode),
    /// Nothing changes.
    Stays,
    /// Nothing changes, and whoever asked is told so.
    Refused,
}

/// The mode table.
pub const fn follow(mode: Mode, trigger: Trigger) -> Verdict {
    use Mode as M;
    use Trigger as T;
    use Verdict::{Refused, Stays, To};
    match (mode, trigger) {
        (M::EmergencyStop, T::EmergencyStop) => Stays,
        (_, T::EmergencyStop) => To(M::EmergencyStop),
        (M::Standby, T::Start) => To(M::Tracking),
        (_, T::Start) => Refused,
        (M::ProtectiveStop | M::EmergencyStop, T::Reset) => To(M::Standby),
        (M::Tracking | M::ControlledStop, T::Reset) => Refused,
        (M::Standby, T::Reset) => Stays,
        (M::Tracking, T::ControlledStop | T::GuardControlled) => To(M::ControlledStop),
        (_, T::ControlledStop | T::GuardControlled) => Stays,
        (M::Tracking | M::ControlledStop, T::GuardProtective) => To(M::ProtectiveStop),
        (_, T::GuardProtective) => Stays,
        (M::Tracking | M::ControlledStop, T::CameToRest) => To(M::Standby),
        (_, T::CameToRest) => Stays,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The table of this module's header, read as text: documentation and code cannot drift apart.
    #[test]
    fn the_code_is_the_documented_table() {
        let rows = include_str!("mode.rs")
            .lines()
            .filter_map(|line| line.strip_prefix("//! | "))
            .skip(2)
            .map(|row| row.split('|').map(str::trim));
        let mut seen = 0;
        for mut cells in rows {
            let name = cells.next().unwrap();
            let mode = Mode::ALL.into_iter().find(|mode| mode.name() == name).unwrap();
            for trigger in Trigger::ALL {
                let expected = match cells.next().unwrap() {
                    "–" => Verdict::Stays,
                    "refused" => Verdict::Refused,
                    to => Verdict::To(Mode::ALL.into_iter().find(|mode| mode.name() == to).unwrap()),
                };
                assert_eq!(follow(mode, trigger), expected, "{mode} {trigger:?}");
                seen += 1;
            }
        }
        assert_eq!(seen, 35);
    }
}
