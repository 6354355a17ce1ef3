//! The law with the regimes around it: which feedback is in force, chosen by what the reference does and by how far the
//! heading is off, and bumpless changes from one to another. What follows a plan, the node or a look at a recording, asks
//! here.

use super::at_rest::{RestGains, Settling, pivot, turn_towards};
use super::blend::{Blend, minus};
use super::{Input, Law, Wanted};
use crate::geometry::BodyVelocity;
use crate::math;
use crate::time::{SpanNs, TimeNs};
use crate::vehicle::Vehicle;
use alloc::boxed::Box;
use alloc::sync::Arc;
use trackhold_proto::words::Regime;

/// Slower than this (m/s) a reference does not move but turns on the spot or rests.
const MOVING_M_S: f64 = 1e-3;
/// Slower than this (rad/s) it rests.
const TURNING_RAD_S: f64 = 1e-3;
/// Realigning ends at this share of the heading error that begins it.
const REALIGNED_SHARE: f64 = 0.3;
/// Realigning keeps its direction while the heading error is above this: near half a turn noise could turn it round.
const AMBIGUOUS_RAD: f64 = 0.8 * math::PI;

/// The numbers of the regimes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FeedbackParams {
    /// How the machine settles.
    pub rest: RestGains,
    /// The heading error from which on no law is left to itself, rad.
    pub realign_rad: f64,
    /// How long a change of feedback takes.
    pub blend: SpanNs,
}

/// How well the machine knows where it rests.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rested {
    /// The smallest dead band of the position that noise leaves room for, m.
    pub least_distance_m: f64,
    /// The same for the heading, rad.
    pub least_heading_rad: f64,
    /// False while it has seen too few poses to begin to settle.
    pub is_sure: bool,
}

/// Exactly.
impl Default for Rested {
    fn default() -> Self {
        Self { least_distance_m: 0.0, least_heading_rad: 0.0, is_sure: true }
    }
}

/// A law on its machine, with the regimes around it.
#[derive(Debug)]
pub struct Feedback {
    law: Box<dyn Law>,
    vehicle: Arc<dyn Vehicle>,
    params: FeedbackParams,
    regime: Regime,
    ended: bool,
    settling: Settling,
    rested: Rested,
    /// The way round that realigning has taken: 1 to the left, −1 to the right.
    turning: f64,
    blend: Blend,
    /// What the last answer added to the reference's motion.
    added: BodyVelocity,
}

/// The heading error is outside the law's domain, and the machine cannot turn on the spot.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct OutsideDomain;

impl Feedback {
    /// A law on a machine.
    pub fn new(law: Box<dyn Law>, vehicle: Arc<dyn Vehicle>, params: FeedbackParams) -> Self {
        Self {
            law,
            vehicle,
            params,
            regime: Regime::None,
            ended: false,
            settling: Settling::default(),
            rested: Rested::default(),
            turning: 0.0,
            blend: Blend::default(),
            added: BodyVelocity::ZERO,
        }
    }

    /// The law.
    pub fn law(&self) -> &dyn Law {
        &*self.law
    }

    /// Exchanges the law in force for another one. What the new one adds to the reference's motion begins with what the old
    /// one added.
    pub fn exchange(&mut self, law: &mut Box<dyn Law>, motion: BodyVelocity) {
        core::mem::swap(&mut self.law, law);
        self.law.reset(motion);
        self.blend.begin();
    }

    /// A run begins with the machine in this motion: what was before is forgotten.
    pub fn begin(&mut self, motion: BodyVelocity) {
        self.law.reset(motion);
        (self.regime, self.settling, self.turning) = (Regime::None, Settling::default(), 0.0);
        (self.blend, self.added) = (Blend::default(), BodyVelocity::ZERO);
    }

    /// The regime in force.
    pub fn regime(&self) -> Regime {
        self.regime
    }

    /// True once the machine has settled.
    pub fn is_settled(&self) -> bool {
        self.regime == Regime::Settling && self.rested.is_sure && self.settling.is_settled()
    }

    /// Settles with poses that are known so well. Without this they count as exact.
    pub fn rely_on(&mut self, rested: Rested) {
        self.rested = rested;
    }

    /// The heading error from which on the law is not left to itself, rad.
    pub fn heading_limit_rad(&self) -> f64 {
        self.params.realign_rad.min(self.law.domain().max_heading_error_rad)
    }

    /// Chooses the regime by the motion of the reference, its plan's time running at rate 1, and the heading error.
    /// `ended`: the reference rests for good, and the machine has to settle within the dead band.
    pub fn choose(&mut self, motion: BodyVelocity, heading_error_rad: f64, ended: bool) -> Regime {
        self.ended = ended;
        let (off, limit_rad) = (heading_error_rad.abs(), self.heading_limit_rad());
        let realigning = self.regime == Regime::Realigning;
        // On its way to the final pose a machine that turns on the spot turns as far as it has to.
        let settles = ended && self.regime == Regime::Settling && self.vehicle.pivot_decel_rad_s2().is_some();
        let next = if off > limit_rad && !settles || realigning && off > REALIGNED_SHARE * limit_rad {
            Regime::Realigning
        } else if motion.speed_m_s.abs() >= MOVING_M_S {
            Regime::Moving
        } else if motion.turn_rate_rad_s.abs() >= TURNING_RAD_S {
            Regime::Pivoting
        } else {
            Regime::Settling
        };
        if next != self.regime {
            (self.settling, self.turning) = (Settling::default(), 0.0);
            if self.regime != Regime::None {
                self.blend.begin();
            }
        }
        self.regime = next;
        next
    }

    /// What the feedback in force wants; call [`Self::choose`] before.
    ///
    /// # Errors
    /// If the heading error is outside the law's domain and the machine cannot turn on the spot.
    pub fn control(&mut self, at: TimeNs, input: &Input<'_>) -> Result<Wanted, OutsideDomain> {
        let rest = self.params.rest.at_least(&self.rested);
        let wanted = match self.regime {
            _ if self.law_is_in_force() => self.law.control(input),
            Regime::Settling if !self.rested.is_sure => BodyVelocity::ZERO.into(),
            Regime::Settling if self.ended => self.settling.control(input, &*self.vehicle, &rest).into(),
            // The plan goes on soon: no manoeuvre is begun that it would cut short.
            Regime::Settling => self.settling.hold(input, &*self.vehicle, &rest).into(),
            Regime::Realigning if self.vehicle.pivot_decel_rad_s2().is_none() => return Err(OutsideDomain),
            Regime::Realigning => self.realign(input, rest.rate_1_s).into(),
            _ => pivot(input, rest.rate_1_s).into(),
        };
        let reference = input.reference.velocity;
        let velocity = self.blend.apply(at, wanted.velocity, reference, self.added, self.params.blend);
        self.added = minus(velocity, reference);
        Ok(Wanted { velocity, ..wanted })
    }

    /// Tells the law what became of the last answer, if that was its own.
    pub fn settle(&mut self, input: &Input<'_>, limited: bool, seconds: f64) {
        if self.law_is_in_force() {
            self.law.settle(input, limited, seconds);
        }
    }

    fn law_is_in_force(&self) -> bool {
        match self.regime {
            Regime::None | Regime::Realigning => false,
            // No law has a dead band; and none that is smooth settles a machine that cannot move sideways.
            Regime::Settling => self.law.domain().at_rest && !self.ended,
            Regime::Pivoting => self.law.domain().pivots,
            Regime::Moving => true,
        }
    }

    /// Turns on the spot towards the reference's heading.
    fn realign(&mut self, input: &Input<'_>, rate_1_s: f64) -> BodyVelocity {
        let short = -input.error.heading_rad;
        if self.turning == 0.0 || short.abs() < AMBIGUOUS_RAD {
            self.turning = short.signum();
        }
        let turn_rad = if short * self.turning < 0.0 { short + self.turning * 2.0 * math::PI } else { short };
        BodyVelocity { speed_m_s: 0.0, turn_rate_rad_s: turn_towards(turn_rad, &*self.vehicle, rate_1_s) }
    }
}
