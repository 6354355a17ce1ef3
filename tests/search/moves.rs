//! The alphabet: everything that the search tries in every state.

use trackhold_proto::words::Cause;

/// Where a pose lies, against the place where the plan has the machine at the coming tick.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) enum Place {
    /// On it.
    On,
    /// To the left by more than a jump, by less than one that stops.
    Aside,
    /// To the left by more than a jump that stops, and than a start allows.
    Far,
    /// As far beyond that as `Aside` is from `On`.
    Farther,
    /// On it, turned round.
    Turned,
}

impl Place {
    /// How far to the left, m.
    pub(crate) const fn left_m(self) -> f64 {
        match self {
            Self::On | Self::Turned => 0.0,
            Self::Aside => 0.7,
            Self::Far => 3.0,
            Self::Farther => 3.7,
        }
    }
}

/// What is wrong with a start, or how else it comes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum StartKind {
    /// Everything quoted as the status tells, at the plan's beginning.
    Good,
    /// The same, where the plan passes nearest.
    Nearest,
    /// The same, at a plan time within the plan.
    Within,
    /// The same, at a plan time beyond the plan.
    Outside,
    /// Another boot's identity.
    OtherBoot,
    /// Another plan's digest.
    OtherPlan,
    /// A number that never was in force.
    NeverNumber,
    /// What the last accepted start said, under a new sequence number: a recording.
    Recorded,
    /// The last accepted start's datagram once more: a duplicate, however late.
    Repeated,
}

/// Which plan comes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(crate) enum PlanKind {
    /// A short closed one.
    Closed,
    /// Another one, which rests first.
    Resting,
    /// One that expects more.
    Open,
    /// Faster than the machine.
    Unfit,
    /// One that continues the one in force.
    Continuing,
    /// From a planner that does not hold the lease.
    OtherPlanner,
}

/// Which law comes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum LawKind {
    /// One that follows forward.
    Forward,
    /// One that follows in reverse alone.
    ReverseOnly,
    /// None that there is.
    Unknown,
}

/// One step of the search.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum Move {
    /// A punctual tick.
    Tick,
    /// A tick two periods late.
    LateTick,
    /// A tick at the coming tick's moment, which then comes too, with no time between them.
    EarlyTick,
    /// A pose that is true now.
    Pose(Place),
    /// A pose that was true longer ago than the pose timeout.
    PoseOld,
    /// The last pose once more.
    PoseRepeated,
    /// A pose out of all range.
    PoseOutOfRange,
    /// A pose from a source that does not hold the lease.
    PoseElsewhere(Place),
    /// An exchange of stamps with the pose source.
    Exchange,
    /// A start.
    Start(StartKind),
    /// A controlled stop.
    ControlledStop,
    /// An emergency stop.
    EmergencyStop,
    /// An emergency stop under the sequence number of the last accepted start.
    EmergencyReused,
    /// A reset.
    Reset,
    /// The last accepted reset's datagram once more.
    ResetRepeated,
    /// A reset under the sequence number of the last accepted start.
    ResetReused,
    /// A cap at half the plan's pace.
    CapHalf,
    /// No cap.
    CapNone,
    /// A cap out of bounds, as a recording might hold.
    CapOutside,
    /// As many orders as are remembered, without influence: what was remembered before is forgotten.
    Forget,
    /// A plan.
    Plan(PlanKind),
    /// A law.
    Tune(LawKind),
    /// The shell stopped the machine by itself.
    Trip(Cause),
    /// The shell tells what it measured.
    Note,
}

/// What every search tries.
const COMMON: &[Move] = &[
    Move::Tick,
    Move::Pose(Place::On),
    Move::Start(StartKind::Good),
    Move::ControlledStop,
    Move::EmergencyStop,
    Move::Reset,
    Move::Plan(PlanKind::Closed),
    Move::Trip(Cause::StalledLoop),
];

/// Orders in every form: used, recorded, repeated, forgotten.
const ORDERS: &[Move] = &[
    Move::Start(StartKind::OtherBoot),
    Move::Start(StartKind::OtherPlan),
    Move::Start(StartKind::NeverNumber),
    Move::Start(StartKind::Recorded),
    Move::Start(StartKind::Repeated),
    Move::EmergencyReused,
    Move::ResetRepeated,
    Move::ResetReused,
    Move::Forget,
    Move::CapOutside,
    Move::Trip(Cause::LostTrip),
    Move::Trip(Cause::Shutdown),
    Move::Note,
];

/// Poses in every place, from more than one source.
const PLACES: &[Move] = &[
    Move::Pose(Place::Aside),
    Move::Pose(Place::Far),
    Move::Pose(Place::Farther),
    Move::Pose(Place::Turned),
    Move::PoseOutOfRange,
    Move::PoseElsewhere(Place::On),
    Move::PoseElsewhere(Place::Far),
    Move::Start(StartKind::Nearest),
];

/// Ticks and poses at the wrong time.
const TIMES: &[Move] = &[
    Move::LateTick,
    Move::EarlyTick,
    Move::PoseOld,
    Move::PoseRepeated,
    Move::PoseElsewhere(Place::On),
    Move::Exchange,
    Move::Trip(Cause::Shutdown),
];

/// Plans of every kind.
const PLANS: &[Move] = &[
    Move::Plan(PlanKind::Resting),
    Move::Plan(PlanKind::Open),
    Move::Plan(PlanKind::Unfit),
    Move::Plan(PlanKind::Continuing),
    Move::Plan(PlanKind::OtherPlanner),
    Move::Start(StartKind::Within),
    Move::Start(StartKind::Outside),
    Move::Start(StartKind::Recorded),
];

/// What an operator changes while the machine runs.
const PACES: &[Move] = &[
    Move::CapHalf,
    Move::CapNone,
    Move::Tune(LawKind::Forward),
    Move::Tune(LawKind::ReverseOnly),
    Move::Tune(LawKind::Unknown),
    Move::Plan(PlanKind::Open),
    Move::LateTick,
];

/// A named part of the alphabet.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Scope {
    /// Orders in every form.
    Orders,
    /// Poses in every place.
    Places,
    /// Ticks and poses at the wrong time.
    Times,
    /// Plans of every kind.
    Plans,
    /// Laws and caps.
    Paces,
    /// All of it together.
    All,
}

impl Scope {
    /// The moves.
    pub(crate) fn moves(self) -> Vec<Move> {
        let parts: &[&[Move]] = match self {
            Self::Orders => &[COMMON, ORDERS],
            Self::Places => &[COMMON, PLACES],
            Self::Times => &[COMMON, TIMES],
            Self::Plans => &[COMMON, PLANS],
            Self::Paces => &[COMMON, PACES],
            Self::All => &[COMMON, ORDERS, PLACES, TIMES, PLANS, PACES],
        };
        let mut moves = Vec::new();
        for step in parts.iter().flat_map(|part| part.iter()) {
            if !moves.contains(step) {
                moves.push(*step);
            }
        }
        moves
    }
}
