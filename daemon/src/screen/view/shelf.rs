//! The oven shelf.

use super::{Frame, Kind, Time};
use serde::Serialize;

/// Everything that is drying, or waits to.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Shelf {
    /// The frame.
    pub frame: Frame,
    /// Containers, those that need a person first.
    pub rows: Vec<Drying>,
    /// Temperature that is set for the next ones, °C.
    pub celsius: f64,
    /// What the method wants, °C, from–to.
    pub celsius_wanted: Option<[f64; 2]>,
    /// The oven was reported off at this time and not on again.
    pub off_since: Option<Time>,
    /// A running outage can be kept by the service: an `oven_off` may be asked without `to`.
    pub holds_outage: bool,
}

/// One container on the shelf.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Drying {
    /// The container.
    pub container: String,
    /// Whose soil.
    pub specimen: String,
    /// Which determination.
    pub kind: Kind,
    /// Its number within its kind.
    pub no: u32,
    /// Where it stands.
    pub place: Place,
    /// In the oven since; else weighed wet or taken out at.
    pub since: Option<Time>,
    /// Somebody recorded the oven; else time counts from the wet weighing.
    pub recorded: bool,
    /// Whole hours of heat so far.
    pub hours: u32,
    /// Hours that the method wants.
    pub hours_wanted: f64,
    /// When they will be full, if it stays in.
    pub ready_at: Option<Time>,
    /// How it stands to the method's rule.
    pub due: Due,
}

/// Where a container is.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Place {
    /// Wet, not yet in the oven.
    #[default]
    Wet,
    /// In the oven.
    In,
    /// Out of the oven, not weighed dry yet.
    Out,
    /// Weighed dry, not yet as the method wants it.
    Drying,
    /// Dried as the method wants it.
    Dry,
}

/// How a container stands to the method's rule of drying.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Due {
    /// Not yet.
    #[default]
    NotYet,
    /// It may be weighed dry.
    Ready,
    /// It could have been weighed a day ago.
    Overdue,
}
