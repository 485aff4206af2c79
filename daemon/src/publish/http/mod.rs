//! The page and its data over HTTP.
//!
//! Everything here reads: the snapshot, the store and the site file. What people change goes to the keeper as the same
//! [`Command`](crate::record::Command) that comes over the Unix socket, under the name of the token that was shown.
//!
//! | file | what it does |
//! | --- | --- |
//! | `server.rs` | listens, bounds connections and slow clients |
//! | `guard.rs` | Host, Origin, rate, tokens: who may ask for what |
//! | `routes.rs` | the list of paths |
//! | `alarms.rs` | alarms, their history, and commands |
//! | `history.rs` | what the watch said of every block, in columns, for plots |
//! | `series.rs` | one gauge or channel, binned to the pixels asked for |
//! | `stream.rs` | server-sent events |
//! | `metrics.rs` | OpenMetrics |
//! | `plan.rs` | the site as the page draws it |
//! | `files.rs` | the page's own files, embedded |

mod alarms;
mod asking;
mod files;
mod guard;
mod history;
mod metrics;
mod plan;
mod problem;
mod routes;
mod series;
mod server;
mod stream;

pub use asking::Behind;
pub use server::{HttpError, Listening, bind, serve, serve_when_free};
