//! A PostgreSQL server, asked through a portal of a transaction that only reads: the server keeps the answer and gives
//! some thousands of rows at a time.

use std::fmt;
use std::time::Duration;

use postgres::config::{Host, SslMode};
use postgres::types::{FromSql, Kind, Type};
use postgres::{Client, Config, Error, NoTls, Row};

use super::tls::Tls;
use super::{Access, QueryError, Rows, Table, Told, hand_over};
use crate::say;

/// Rows asked for at once.
const ROWS: i32 = 4096;

/// How long to wait for a connection, unless the address says.
const PATIENCE: Duration = Duration::from_secs(10);

/// 2000-01-01 as Unix seconds: the server's day 0.
const EPOCH: f64 = 946_684_800.0;

/// Where a server is, and who asks.
#[derive(Clone)]
pub(super) struct Server {
    config: Config,
    tls: Option<Tls>,
}

impl Server {
    pub(super) fn at(address: &str, access: Access) -> Result<Server, QueryError> {
        let refuse = |reason: String| QueryError::Address { reason };
        let mut config: Config = address.parse().map_err(|error| refuse(say::chain(&error)))?;
        if config.get_connect_timeout().is_none() {
            config.connect_timeout(PATIENCE);
        }
        config.application_name("outwait");
        let variable = || std::env::var("PGPASSWORD").ok();
        let given = access.password.or_else(|| config.get_password().is_none().then(variable).flatten());
        if let Some(password) = given {
            config.password(password);
        }
        let tls = match access.authorities {
            Some(file) => {
                // Whoever names whom to trust wants nothing less.
                config.ssl_mode(SslMode::Require);
                Some(Tls::trusting(&file)?)
            }
            None if config.get_ssl_mode() == SslMode::Require => {
                return Err(refuse(
                    "over TLS the server is known by a certificate; name the file of those trusted with --authorities"
                        .into(),
                ));
            }
            None => None,
        };
        Ok(Server { config, tls })
    }

    pub(super) fn ask(&self, query: &str, rows: &Rows) -> Result<(), QueryError> {
        let client = match &self.tls {
            Some(tls) => self.config.connect(tls.clone()),
            None => self.config.connect(NoTls),
        };
        let mut client = client.map_err(|error| QueryError::Reach { reason: say::chain(&error) })?;
        answer(&mut client, query, rows)
    }
}

fn answer(client: &mut Client, query: &str, rows: &Rows) -> Result<(), QueryError> {
    let refused = |error: Error| QueryError::Refused { reason: say::chain(&error) };
    let broke_off = |error: Error| QueryError::BrokeOff { reason: say::chain(&error) };
    let mut transaction = client.build_transaction().read_only(true).start().map_err(refused)?;
    let statement = transaction.prepare(query).map_err(refused)?;
    let types: Vec<Type> = statement.columns().iter().map(|column| column.type_().clone()).collect();
    for column in statement.columns() {
        if !can_read(column.type_()) {
            let reason = format!(
                "the column {:?} is of the type {}; cast it to a number, a text, a time or an interval",
                column.name(),
                column.type_()
            );
            return Err(QueryError::Refused { reason });
        }
    }
    let portal = transaction.bind(&statement, &[]).map_err(refused)?;
    // What the first rows show is told before the columns, so that a query that fails at once is refused.
    let mut some = transaction.query_portal(&portal, ROWS).map_err(refused)?;
    let columns = statement.columns().iter().map(|column| column.name().to_owned()).collect();
    if rows.send(Ok(Told::Columns(columns))).is_err() {
        return Ok(());
    }
    while !some.is_empty() {
        let mut table = Table::new(types.len());
        for row in &some {
            fill(row, &types, &mut table).map_err(broke_off)?;
            if table.is_full() && !hand_over(rows, std::mem::replace(&mut table, Table::new(types.len()))) {
                return Ok(());
            }
        }
        if !table.is_empty() && !hand_over(rows, table) {
            return Ok(());
        }
        some = transaction.query_portal(&portal, ROWS).map_err(broke_off)?;
    }
    Ok(())
}

/// Without the password.
impl fmt::Display for Server {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("postgres://")?;
        if let Some(user) = self.config.get_user() {
            write!(f, "{user}@")?;
        }
        match self.config.get_hosts().first() {
            Some(Host::Tcp(host)) => write!(f, "{host}")?,
            #[cfg(unix)]
            Some(Host::Unix(path)) => write!(f, "{}", path.display())?,
            None => {}
        }
        if let Some(port) = self.config.get_ports().first() {
            write!(f, ":{port}")?;
        }
        write!(f, "/{}", self.config.get_dbname().unwrap_or_default())
    }
}

/// The bytes of a value as the server sends them.
struct Raw<'a>(&'a [u8]);

impl<'a> FromSql<'a> for Raw<'a> {
    fn from_sql(_: &Type, raw: &'a [u8]) -> Result<Self, Box<dyn std::error::Error + Sync + Send>> {
        Ok(Raw(raw))
    }

    fn accepts(_: &Type) -> bool {
        true
    }
}

fn can_read(kind: &Type) -> bool {
    let known = [
        Type::BOOL,
        Type::INT2,
        Type::INT4,
        Type::INT8,
        Type::FLOAT4,
        Type::FLOAT8,
        Type::NUMERIC,
        Type::TIMESTAMP,
        Type::TIMESTAMPTZ,
        Type::DATE,
        Type::INTERVAL,
        Type::UUID,
    ];
    is_text(kind) || known.contains(kind)
}

fn is_text(kind: &Type) -> bool {
    let known = [Type::TEXT, Type::VARCHAR, Type::BPCHAR, Type::NAME, Type::UNKNOWN];
    known.contains(kind) || matches!(kind.kind(), Kind::Enum(_))
}

fn fill(row: &Row, types: &[Type], table: &mut Table) -> Result<(), Error> {
    for (column, kind) in types.iter().enumerate() {
        match row.try_get::<_, Option<Raw<'_>>>(column)? {
            None => table.nothing(),
            // A value that is not as long as its type says cannot come from a server; it is no value.
            Some(Raw(bytes)) => value(bytes, kind, table).unwrap_or_else(|| table.text("?")),
        }
    }
    Ok(())
}

/// Puts a value into the table; `None` if its bytes are not of that type. The binary forms are those of the server's
/// `*_send` functions.
fn value(bytes: &[u8], kind: &Type, table: &mut Table) -> Option<()> {
    match *kind {
        Type::BOOL => table.text(if *bytes.first()? == 0 { "false" } else { "true" }),
        Type::INT2 => table.whole(i16::from_be_bytes(bytes.try_into().ok()?).into()),
        Type::INT4 => table.whole(i32::from_be_bytes(bytes.try_into().ok()?).into()),
        Type::INT8 => table.whole(i64::from_be_bytes(bytes.try_into().ok()?)),
        Type::FLOAT4 => table.number(f32::from_be_bytes(bytes.try_into().ok()?).into()),
        Type::FLOAT8 => table.number(f64::from_be_bytes(bytes.try_into().ok()?)),
        Type::NUMERIC => match numeric(bytes)? {
            Ok(number) => table.number(number),
            Err(word) => table.text(word),
        },
        Type::TIMESTAMP | Type::TIMESTAMPTZ => match i64::from_be_bytes(bytes.try_into().ok()?) {
            i64::MAX => table.text("infinity"),
            i64::MIN => table.text("-infinity"),
            microseconds => table.seconds(EPOCH + microseconds as f64 / 1e6),
        },
        Type::DATE => match i32::from_be_bytes(bytes.try_into().ok()?) {
            i32::MAX => table.text("infinity"),
            i32::MIN => table.text("-infinity"),
            days => table.seconds(EPOCH + f64::from(days) * 86_400.0),
        },
        Type::INTERVAL => {
            let (microseconds, rest) = bytes.split_first_chunk::<8>()?;
            let (days, months) = rest.split_first_chunk::<4>()?;
            match i32::from_be_bytes(months.try_into().ok()?) {
                0 => {
                    let days = f64::from(i32::from_be_bytes(*days)) * 86_400.0;
                    table.seconds(days + i64::from_be_bytes(*microseconds) as f64 / 1e6);
                }
                // No fixed length: the reader refuses it.
                months => table.text(&format!("{months} months")),
            }
        }
        Type::UUID => {
            let hex: String = bytes.iter().map(|byte| format!("{byte:02x}")).collect();
            table.text(&hex);
        }
        _ => table.text(&String::from_utf8_lossy(bytes)),
    }
    Some(())
}

/// A decimal: digits to the base 10,000, the weight of the first, the sign. As the nearest double, or a word.
fn numeric(bytes: &[u8]) -> Option<Result<f64, &'static str>> {
    let short = |at: usize| Some(u16::from_be_bytes(bytes.get(at..at + 2)?.try_into().ok()?));
    let (digits, weight, sign) = (short(0)?, short(2)?.cast_signed(), short(4)?);
    let mut text = match sign {
        0x0000 => String::from("0"),
        0x4000 => String::from("-0"),
        0xd000 => return Some(Err("infinity")),
        0xf000 => return Some(Err("-infinity")),
        _ => return Some(Err("NaN")),
    };
    for digit in 0..usize::from(digits) {
        text += &format!("{:04}", short(8 + 2 * digit)?);
    }
    text += &format!("e{}", 4 * (i32::from(weight) + 1 - i32::from(digits)));
    text.parse().ok().map(Ok)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn decimals() {
        // Bytes of `numeric_send`: SELECT encode(numeric_send(-12345.678), 'hex') on PostgreSQL 17.
        let bytes = [0, 3, 0, 1, 0x40, 0, 0, 3, 0, 1, 0x09, 0x29, 0x1a, 0x7c];
        assert_eq!(numeric(&bytes), Some(Ok(-12_345.678)));
        assert_eq!(numeric(&[0, 0, 0, 0, 0, 0, 0, 0]), Some(Ok(0.0)));
        assert_eq!(numeric(&[0, 0, 0, 0, 0xc0, 0, 0, 0]), Some(Err("NaN")));
        assert_eq!(numeric(&[0, 9, 0]), None);
    }
}
