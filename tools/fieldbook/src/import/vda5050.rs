//! `import vda5050`: the released part (the base) of a VDA 5050 order, versions 1 and 2 of the interface.
//!
//! The order's nodes and edges are checked first ([`order`]), then they become a route ([`route`]): straight lines, rational
//! splines, and turns on the spot where headings differ at a node.

pub mod order;
pub mod route;

use super::track::Refused;
use super::{Imported, Output, positive};
use order::Order;
use std::path::PathBuf;

/// The arguments.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The order, a JSON message of the interface.
    pub file: PathBuf,
    /// Speed where an edge has no maxSpeed, m/s; where it has one, the lower of both counts.
    #[arg(long, value_name = "M/S", value_parser = positive)]
    pub speed: Option<f64>,
    /// Turn rate on the spot, rad/s; at most the maxRotationSpeed of the edges there.
    #[arg(long, value_name = "RAD/S", value_parser = positive, default_value = "0.5")]
    pub pivot_rate: f64,
    /// What comes out.
    #[command(flatten)]
    pub output: Output,
}

pub(super) fn import(args: &Args, text: &str) -> Result<Imported, Refused> {
    let mut notes = Vec::new();
    let order = Order::read(text)?;
    let base = order.base(&mut notes)?;
    let wishes = route::Wishes { speed: args.speed, pivot_rate: args.pivot_rate };
    let draft = route::draft(&base, &wishes, &mut notes)?;
    let last = &base.nodes[base.nodes.len() - 1];
    let what = format!(
        "{} nodes and {} edges released, to the decision point {}",
        base.nodes.len(),
        base.edges.len(),
        last.node_id
    );
    let id = Some(order.order_id.clone()).filter(|id| !id.is_empty());
    Ok(Imported { draft, what, id, revision: Some(order.order_update_id), line: None, notes })
}
