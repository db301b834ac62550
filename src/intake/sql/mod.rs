//! Waits by a query: the rows that a database answers, each a record, its columns named after fields.
//!
//! A thread of its own asks and hands rows over some thousands at a time, so memory does not grow with the answer.
//! Nothing can be changed by a query: PostgreSQL is asked in a transaction that only reads, a SQLite file is opened for
//! reading.

#[cfg(feature = "postgres")]
mod postgres;
mod sqlite;
mod table;
#[cfg(feature = "postgres")]
mod tls;

use std::fmt;
use std::path::{Path, PathBuf};
use std::sync::mpsc::{Receiver, SyncSender, sync_channel};

pub(super) use self::table::{Table, harvest};
use super::error::IntakeError;

/// A database, by its address.
#[derive(Clone)]
pub struct Database(Kind);

#[derive(Clone)]
enum Kind {
    Sqlite(PathBuf),
    #[cfg(feature = "postgres")]
    Postgres(Box<postgres::Server>),
}

/// How a server is reached, beside its address.
#[derive(Clone, Debug, Default)]
pub struct Access {
    /// The password; that of `PGPASSWORD` or the address unless given. It is never printed.
    pub password: Option<String>,
    /// File of the certificates (PEM) by which a server over TLS is known.
    pub authorities: Option<PathBuf>,
}

impl Database {
    /// Understands `postgres://…`, `postgresql://…` (as libpq does), `sqlite:FILE`, or the name of a SQLite file.
    ///
    /// # Errors
    /// [`QueryError::Address`] for another address, or one that asks for what cannot be had.
    pub fn at(address: &str, access: Access) -> Result<Database, QueryError> {
        if let Some(file) = address.strip_prefix("sqlite:") {
            return Ok(Database(Kind::Sqlite(file.strip_prefix("//").unwrap_or(file).into())));
        }
        if address.starts_with("postgres://") || address.starts_with("postgresql://") {
            #[cfg(feature = "postgres")]
            return postgres::Server::at(address, access)
                .map(|server| Database(Kind::Postgres(Box::new(server))));
            #[cfg(not(feature = "postgres"))]
            return Err(QueryError::Address {
                reason: "this program was built without PostgreSQL; build it with the feature `postgres`"
                    .into(),
            });
        }
        if address.contains("://") {
            let reason = "it is none of postgres://USER@HOST/DATABASE and sqlite:FILE".into();
            return Err(QueryError::Address { reason });
        }
        let _ = access;
        Ok(Database(Kind::Sqlite(Path::new(address).to_owned())))
    }

    /// Asks, and gives the names of the answer's columns, and the rows to come.
    pub(super) fn ask(&self, query: &str) -> Result<Answer, QueryError> {
        // Two tables on the way, so that the asking and the reading do not wait for each other.
        let (sender, rows) = sync_channel(2);
        let (database, query) = (self.clone(), query.to_owned());
        let asking = move || {
            let outcome = match &database.0 {
                Kind::Sqlite(path) => sqlite::ask(path, &query, &sender),
                #[cfg(feature = "postgres")]
                Kind::Postgres(server) => server.ask(&query, &sender),
            };
            if let Err(error) = outcome {
                // Whoever has gone needs no reason.
                let _ = sender.send(Err(error));
            }
        };
        std::thread::Builder::new().name("query".into()).spawn(asking).map_err(QueryError::Thread)?;
        match rows.recv() {
            Ok(Ok(Told::Columns(columns))) => Ok(Answer { columns, rows }),
            Ok(Err(error)) => Err(error),
            Ok(Ok(Told::Rows(_))) | Err(_) => Err(QueryError::Lost),
        }
    }
}

impl fmt::Display for Database {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match &self.0 {
            Kind::Sqlite(path) => write!(f, "{}", path.display()),
            #[cfg(feature = "postgres")]
            Kind::Postgres(server) => write!(f, "{server}"),
        }
    }
}

impl fmt::Debug for Database {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "Database({self})")
    }
}

/// An answer: its columns, and its rows as they come.
pub(super) struct Answer {
    pub(super) columns: Vec<String>,
    rows: Receiver<Result<Told, QueryError>>,
}

/// What the thread that asks hands over: the columns once, then rows.
enum Told {
    Columns(Vec<String>),
    Rows(Table),
}

type Rows = SyncSender<Result<Told, QueryError>>;

impl Answer {
    /// The next rows; `None` after the last.
    pub(super) fn next(&mut self) -> Result<Option<Table>, QueryError> {
        match self.rows.recv() {
            Ok(Ok(Told::Rows(table))) => Ok(Some(table)),
            Ok(Ok(Told::Columns(_))) => Err(QueryError::Lost),
            Ok(Err(error)) => Err(error),
            Err(_) => Ok(None),
        }
    }
}

/// Hands rows over; `false` if nobody wants them.
fn hand_over(rows: &Rows, table: Table) -> bool {
    rows.send(Ok(Told::Rows(table))).is_ok()
}

/// Why a database could not be asked.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum QueryError {
    /// The address cannot be used.
    #[error("the address cannot be used: {reason}")]
    Address {
        /// Why.
        reason: String,
    },
    /// The database cannot be reached or opened.
    #[error("it cannot be reached: {reason}")]
    Reach {
        /// Why.
        reason: String,
    },
    /// It does not answer the query.
    #[error("it refuses the query: {reason}")]
    Refused {
        /// What it says.
        reason: String,
    },
    /// It broke off in the middle of its answer.
    #[error("it broke off: {reason}")]
    BrokeOff {
        /// What it says.
        reason: String,
    },
    /// The thread that asks cannot be started.
    #[error("the system refused a thread: {0}")]
    Thread(#[source] std::io::Error),
    /// The thread that asks ended without a word; a fault of the program.
    #[error("the asking ended without a word")]
    Lost,
}

impl QueryError {
    /// What to do about it, where the reason does not say it.
    pub fn remedy(&self) -> Option<&'static str> {
        Some(match self {
            QueryError::Address { .. } => return None,
            QueryError::Reach { .. } => {
                "see whether the server runs and lets this user in from here, or whether the file exists and may be read"
            }
            QueryError::Refused { .. } => {
                "ask one SELECT that changes nothing; try it in the database's own shell"
            }
            QueryError::BrokeOff { .. } => "nothing was reckoned; see to the database, and start again",
            QueryError::Thread(_) => "allow this user more threads or memory, and start again",
            QueryError::Lost => "this is a fault of the program; report it with the query",
        })
    }

    /// With the name of the database.
    pub(super) fn of(self, file: &str) -> IntakeError {
        IntakeError::Query { file: file.into(), source: self }
    }
}
