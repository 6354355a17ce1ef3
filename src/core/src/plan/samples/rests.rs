//! Where samples rest: what a steered machine steers for meanwhile, found once so that a tick only looks it up.

use super::{Piece, Samples};
use crate::plan::Reference;
use alloc::vec::Vec;

/// A piece in which the reference rests.
#[derive(Clone, Copy, Debug)]
struct Rest {
    piece: usize,
    curvature_1_m: f64,
    rest_curvature_1_m: f64,
}

/// All pieces in which the reference rests, in their order.
#[derive(Debug, Default)]
pub(super) struct Rests(Vec<Rest>);

impl Rests {
    /// Those of way-poses: each is steered for what comes next, the last ones for what was before.
    pub(super) fn of(samples: &Samples) -> Self {
        let mut rests: Vec<Rest> = Vec::new();
        let pieces = samples.points.len() - 1;
        for index in (0..pieces).rev().filter(|index| samples.piece(*index).rests()) {
            let next = match rests.last() {
                Some(later) if later.piece == index + 1 => *later,
                _ if index + 1 < pieces => Rest::with(samples.piece(index + 1).reference(0.0)),
                _ => (0..index)
                    .rev()
                    .map(|before| samples.piece(before))
                    .find(|piece| !piece.rests())
                    .map_or(Rest::STRAIGHT, |piece| Rest::with(piece.reference(1.0))),
            };
            rests.push(Rest { piece: index, ..next });
        }
        rests.reverse();
        Self(rests)
    }

    /// The reference in a piece, steered for what it is to be.
    pub(super) fn steered(&self, piece: usize, reference: Reference) -> Reference {
        match self.0.binary_search_by_key(&piece, |rest| rest.piece) {
            Ok(found) => Reference {
                curvature_1_m: self.0[found].curvature_1_m,
                rest_curvature_1_m: self.0[found].rest_curvature_1_m,
                ..reference
            },
            Err(_) => reference,
        }
    }
}

impl Rest {
    const STRAIGHT: Self = Self { piece: 0, curvature_1_m: 0.0, rest_curvature_1_m: 0.0 };

    fn with(reference: Reference) -> Self {
        let Reference { curvature_1_m, rest_curvature_1_m, .. } = reference;
        Self { piece: 0, curvature_1_m, rest_curvature_1_m }
    }
}

impl Piece<'_> {
    /// True if it neither moves nor turns.
    fn rests(&self) -> bool {
        self.on_the_spot
            && self.turn() == 0.0
            && [self.from, self.to].iter().all(|point| point.turn_rate_rad_s.unwrap_or(0.0) == 0.0)
    }
}
