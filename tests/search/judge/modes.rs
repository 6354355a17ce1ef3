//! The mode table, and the one-time start numbers.

use super::{Asked, Broken, Heard, Judge, Rule};
use trackhold_core::node::mode::{Trigger, Verdict};
use trackhold_proto::journal::Order;
use trackhold_proto::words::{Mode, Refusal, StopKind};

/// What an event can ask of the table.
fn triggers(asked: &Asked) -> &'static [Trigger] {
    match asked {
        Asked::Tick => &[Trigger::GuardControlled, Trigger::GuardProtective, Trigger::CameToRest],
        Asked::Trip(_) => &[Trigger::GuardProtective],
        Asked::Order(event) => match event.order {
            Order::Start(_) => &[Trigger::Start],
            Order::Stop(StopKind::Controlled) => &[Trigger::ControlledStop],
            Order::Stop(StopKind::Emergency) => &[Trigger::EmergencyStop],
            Order::Reset => &[Trigger::Reset],
            Order::Cap { .. } => &[],
        },
        Asked::Pose(_) | Asked::Long(..) | Asked::Quiet => &[],
    }
}

impl Judge {
    pub(super) fn judge_modes(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        let triggers = triggers(heard.asked);
        match heard.change {
            Some(change) => {
                let asked_for =
                    |trigger: &&Trigger| self.table.says(heard.before, **trigger) == Verdict::To(change.to);
                let trigger = triggers.iter().find(asked_for).filter(|_| change.from == heard.before);
                let told = || format!("{:?} in {}: {change:?}", heard.asked, heard.before);
                let Some(trigger) = trigger else { return Err(Broken { rule: Rule::Table, told: told() }) };
                self.asked.add(heard.before, *trigger);
            }
            None => self.judge_staying(heard, triggers)?,
        }
        let Some(record) = heard.record else { return Ok(()) };
        let cause = heard.change.map_or(self.cause, |change| change.cause);
        let told = || format!("{record:?} after {} {cause}", heard.after);
        Broken::unless((record.mode, record.cause) == (heard.after, cause), Rule::Told, told)
    }

    /// Where nothing changed, the table must not have asked for a change, or the order was refused with its reason.
    fn judge_staying(&mut self, heard: &Heard<'_>, triggers: &[Trigger]) -> Result<(), Broken> {
        let &[trigger] = triggers else { return Ok(()) };
        if self.orders.repeats(heard) {
            return Ok(());
        }
        let refusal = heard.refusal();
        let kept = match (self.table.says(heard.before, trigger), trigger) {
            (Verdict::Stays, _) => refusal.is_none(),
            (Verdict::Refused, _) => refusal == Some(Refusal::Mode { mode: heard.before }),
            (Verdict::To(_), Trigger::Start) => refusal.is_some(),
            (Verdict::To(_), Trigger::Reset) => {
                let remains = Refusal::CauseRemains { cause: self.cause };
                heard.before == Mode::ProtectiveStop && refusal == Some(remains)
            }
            (Verdict::To(_), _) => false,
        };
        self.asked.add(heard.before, trigger);
        let told = || format!("{:?} in {} changes nothing: {refusal:?}", heard.asked, heard.before);
        Broken::unless(kept, Rule::Table, told)
    }

    pub(super) fn judge_numbers(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        if let Some(change) = heard.change {
            let renewed = change.start_number != self.number;
            let before = self.number;
            let told = || format!("{change:?}, the number before was {before}");
            Broken::unless(renewed == (change.from == Mode::Tracking), Rule::Renewal, told)?;
            if renewed {
                self.used_numbers.push(self.number);
                self.number = change.start_number;
            }
            Broken::unless(!self.used_numbers.contains(&self.number), Rule::Renewal, told)?;
        }
        let Some(record) = heard.record else { return Ok(()) };
        let told = || format!("{record:?}, the number told is {}", self.number);
        Broken::unless(record.start_number == self.number, Rule::Told, told)
    }

    /// The start number in force, as it was told.
    pub(super) fn number(&self) -> u64 {
        self.number
    }
}
