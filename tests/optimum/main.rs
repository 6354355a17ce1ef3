//! How close the laws come to the optimum: twelve scenarios on a differential drive, whose optima CasADi and IPOPT computed
//! (`tests/reference/optimum/optimum.py`; its header says what is minimised, and how).
//!
//! | file | what it holds |
//! | --- | --- |
//! | `scenario` | a scenario as it lies in the reference data, and the cost of a motion |
//! | `optima` | the optima drive through our own vehicle: the data are what they claim to be |
//! | `table` | every law through every scenario, in closed loop; the table is a committed snapshot |
//! | `tuning` | how the gains of `gains.toml` were found; not part of a test run |

mod optima;
mod scenario;
mod table;
mod tuning;
