//! How files of waits become waits.
//!
//! In: files, standard input or any reader, packed or not, in one of the formats of [`Format`]. Out: a [`Record`]
//! for each wait, handed to a [`Sink`], and a [`Report`] of what was read and what was refused. Nothing is printed
//! and nothing is kept but the ids of waits whose end has not come: memory does not grow with the input.
//!
//! ```
//! use outwait::intake::{Options, Record, Sink, Source, read};
//!
//! #[derive(Default)]
//! struct Longest(f64);
//!
//! impl Sink for Longest {
//!     fn take(&mut self, record: &Record<'_>) {
//!         if let outwait::wait::Age::Exact(age) = record.wait.age() {
//!             self.0 = self.0.max(age);
//!         }
//!     }
//!     fn fork(&self) -> Self {
//!         Longest::default()
//!     }
//!     fn absorb(&mut self, other: Self) {
//!         self.0 = self.0.max(other.0);
//!     }
//! }
//!
//! let waits = "stream,elapsed_ms\ncatalogue.lookup,18.3\ncatalogue.lookup,203\n";
//! let source = Source::reader("waits.csv", waits.as_bytes());
//! let (longest, report) = read(vec![source], &Options::default(), Longest::default(), &mut |_| ())?;
//! assert_eq!((longest.0, report.waits), (0.203, 2));
//! # Ok::<(), outwait::intake::IntakeError>(())
//! ```

mod blocks;
mod collect;
#[cfg(feature = "columnar")]
mod columnar;
mod csv;
mod decimal;
mod error;
mod exposition;
mod feed;
mod flaw;
mod format;
mod header;
mod journal;
mod lines;
mod mapping;
mod ndjson;
mod otlp;
mod outline;
mod pace;
mod pairs;
mod pattern;
mod read;
mod record;
mod report;
mod rules;
mod short;
mod source;
mod sql;
mod streams;
mod swf;
mod telemetry;

use std::num::NonZeroUsize;
use std::sync::Arc;

use crate::glob::Glob;
use crate::running::Running;

pub use error::{ColumnsError, HeaderError, IntakeError};
pub use exposition::Exposition;
pub use format::Format;
pub use mapping::{Mapping, MappingError};
pub use otlp::{Answer, Encoding};
pub(crate) use outline::Outline;
pub use pace::ClosedLoop;
pub use pattern::{Pattern, PatternError};
pub use read::{Progress, read};
pub use record::{Half, Record, Side};
pub use report::{
    BadCount, BadLine, BadLines, Because, COMMENTS, Comment, EXAMPLES, FileReport, LeftOut, PairsReport,
    Report, Suspicion,
};
pub use rules::{Condition, Facts, MAX_CONDITIONS, MAX_RULE_BYTES, RuleError, Rules, Template};
pub(crate) use source::Packing;
pub use source::Source;
pub use sql::{Access, Database, QueryError};

/// The reason under which a body counts that cannot be decoded as a whole ([`BadCount::reason`]).
pub const UNDECODABLE: &str = "not to be decoded";

/// What takes the waits.
///
/// With more than one thread each has its own sink, made by [`Sink::fork`], and which waits go to which is left to
/// chance. The result is the same for any number of threads if `absorb` makes the same of the same waits in any
/// order and grouping, as a tally does. On one thread a sink takes whole records in the order of the input.
pub trait Sink: Send + Sized {
    /// Takes a wait.
    fn take(&mut self, record: &Record<'_>);

    /// Takes a start or an end that came in a line of its own, and says so; what is left is joined by the reader, and
    /// comes as a wait. Unless said, nothing is taken.
    fn take_half(&mut self, half: &Half<'_>) -> bool {
        let _ = half;
        false
    }

    /// Takes a reading of a histogram that only grows, and says so; of what is left the reader keeps the state, and the
    /// differences come as waits. Unless said, nothing is taken.
    fn take_running(&mut self, running: &Running) -> bool {
        let _ = running;
        false
    }

    /// An empty sink of the same kind, for another thread.
    fn fork(&self) -> Self;

    /// Takes over all that another sink took.
    fn absorb(&mut self, other: Self);
}

/// What to read, and what to put up with.
#[derive(Clone, Debug, PartialEq)]
pub struct Options {
    /// The format of every input; `None`: found out for each.
    pub format: Option<Format>,
    /// How the lines of a log, or the messages of a journal, become records; `None`: they are records.
    pub pattern: Option<Arc<Pattern>>,
    /// What stands for what, where names, endings or times are not ours.
    pub mapping: Option<Arc<Mapping>>,
    /// The streams wanted, and the name of records that have none; `None`: all, and each must have one.
    pub streams: Option<Glob>,
    /// One stream for all records, whatever they call theirs; a name there is then not even looked at.
    pub one_stream: Option<String>,
    /// Which time of a job log is the wait.
    pub measure: Measure,
    /// How telemetry becomes waits.
    pub rules: Rules,
    /// How metrics as text become waits.
    pub exposition: Exposition,
    /// How many bad lines are put up with.
    pub bad_lines: Allowed,
    /// Only waits that ended or were last seen then or later, Unix seconds.
    pub since: Option<f64>,
    /// Only waits that ended or were last seen earlier, Unix seconds.
    pub until: Option<f64>,
    /// Threads that parse; one more reads and unpacks if there are several. `None`: as many as there are cores.
    pub threads: Option<NonZeroUsize>,
    /// Whether tables in columns are read, which only their decoders can bound. Default: they are.
    pub tables: bool,
    /// Longest line, bytes. Default 1 MiB.
    pub line_bytes: usize,
    /// Most bytes of all inputs together, unpacked. Default: no limit.
    pub total_bytes: u64,
    /// Most halves of waits that miss the other at once. Above it the oldest end without a start is dropped; without
    /// such an end the oldest start becomes a wait still open. Both are counted. Default: 1,000,000.
    pub most_open: usize,
}

impl Default for Options {
    fn default() -> Options {
        Options {
            format: None,
            pattern: None,
            mapping: None,
            streams: None,
            one_stream: None,
            measure: Measure::default(),
            rules: Rules::default(),
            exposition: Exposition::default(),
            bad_lines: Allowed::default(),
            since: None,
            until: None,
            threads: None,
            tables: true,
            line_bytes: 1 << 20,
            total_bytes: u64::MAX,
            most_open: 1_000_000,
        }
    }
}

/// Which time of a job log is the wait.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Measure {
    /// From submission to start: what ran is done, what was cancelled in the queue was given up.
    #[default]
    Wait,
    /// From start to end: completed is done, failed is failed, cancelled was given up.
    Run,
}

/// How many bad lines are put up with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Allowed {
    /// At most so many.
    AtMost(u64),
    /// Any number.
    All,
}

impl Default for Allowed {
    fn default() -> Allowed {
        Allowed::AtMost(0)
    }
}
