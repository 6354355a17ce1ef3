//! What dead time, noise, latency, loss and speed do to tracking, in simulated time.
//!
//! | file | what it holds |
//! | --- | --- |
//! | `eight` | an eight at 1 m/s under dead time and noise, with and without carrying poses forward |
//! | `bend` | the plan and the machines of the sweep |
//! | `field` | node and stand-in robot with a faulty link between them, datagram by datagram |
//! | `table` | every law over latency, loss and speed; the table is a committed snapshot |

mod bend;
mod eight;
mod field;
mod table;
