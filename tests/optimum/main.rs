//! How close the laws come to the optimum: twelve scenarios on a differential drive, whose optima CasADi and IPOPT computed
//! (`tests/reference/optimum/optimum.py`; its header says what is minimised, and how).
//!
//! | file | what it holds |
//! | --- | --- |
//! | `scenario` | a scenario as it lies in the reference data, and the cost of a motion |
//! | `optima` | the optima drive through our own vehicle: the data are what they claim to be |
//! | `table` | every law through every scenario, in closed loop; the table is a committed snapshot |
//! | `tuning` | how the gains of `gains.toml` were found; not part of a test run |
//!
//! Out of reach: `turned-round` for the laws that do not optimise. The optimum turns, backs off and catches up all at once,
//! with a wheel at a limit of speed or acceleration throughout its first 2.1 s. Kanayama's law comes to 1.298 with gains
//! searched for this scenario alone, but then k_y is next to nothing, and no line is found with that.

mod optima;
mod scenario;
mod table;
mod tuning;
