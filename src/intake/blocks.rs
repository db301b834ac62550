//! Cuts a stream of bytes into blocks of whole records.
//!
//! Blocks are filled before they are cut, so where they end depends on the bytes alone, not on how they arrive.

use std::io::{self, Read};

/// Bytes of a block: large enough to make the hand-over cheap, small enough to stay in a core's own cache.
const BLOCK: usize = 512 * 1024;

/// How records end.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Records {
    /// At each newline.
    Lines,
    /// At each newline outside quotation marks, which open only at the start of a cell.
    Rows {
        /// What stands between cells.
        delimiter: u8,
    },
}

/// What [`Blocks::next`] found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Found {
    /// Whole records.
    Records,
    /// One line that is longer than the limit; its bytes are gone.
    Long,
    /// Lines in which a quoted cell begins and does not end; their bytes are gone.
    OpenQuote {
        /// How many lines.
        lines: u64,
    },
}

pub(super) struct Blocks<'r> {
    reader: Box<dyn Read + Send + 'r>,
    /// Read, but not handed out.
    rest: Vec<u8>,
    ended: bool,
    /// Longest record, bytes.
    limit: usize,
    /// How often in a row a quotation mark was left open.
    open_quotes: u32,
    /// Bytes read.
    pub(super) read: u64,
}

impl<'r> Blocks<'r> {
    pub(super) fn new(reader: impl Read + Send + 'r, limit: usize) -> Blocks<'r> {
        Blocks { reader: Box::new(reader), rest: Vec::new(), ended: false, limit, open_quotes: 0, read: 0 }
    }

    /// The first bytes, up to a block. For use before [`Blocks::next`].
    pub(super) fn peek(&mut self) -> io::Result<&[u8]> {
        let mut head = std::mem::take(&mut self.rest);
        self.fill(&mut head, BLOCK)?;
        self.rest = head;
        Ok(&self.rest)
    }

    /// All that is left as it comes. For use in place of [`Blocks::next`].
    #[cfg(feature = "columnar")]
    pub(super) fn into_reader(self) -> impl Read + Send + use<'r> {
        io::Cursor::new(self.rest).chain(self.reader)
    }

    /// Drops the first bytes of what [`Blocks::peek`] showed.
    pub(super) fn skip(&mut self, bytes: usize) {
        self.rest.drain(..bytes.min(self.rest.len()));
    }

    /// The first record of what [`Blocks::peek`] showed, with its newline; `None` if it does not end there.
    pub(super) fn first_record(&self, records: Records) -> Option<&[u8]> {
        match records.first_end(&self.rest) {
            Some(end) => self.rest.get(..end),
            None => self.ended.then_some(&self.rest),
        }
    }

    /// Fills `block` with the next whole records; `None` at the end.
    pub(super) fn next(&mut self, block: &mut Vec<u8>, records: Records) -> io::Result<Option<Found>> {
        block.clear();
        std::mem::swap(block, &mut self.rest);
        let mut size = BLOCK;
        loop {
            self.fill(block, size)?;
            if block.is_empty() {
                return Ok(None);
            }
            if let Some(end) = records.last_end(block) {
                self.rest.extend_from_slice(&block[end..]);
                block.truncate(end);
                self.open_quotes = 0;
                return Ok(Some(Found::Records));
            }
            let open = records != Records::Lines && block.contains(&b'\n');
            if self.ended && !open {
                if block.len() > self.limit {
                    block.clear();
                    return Ok(Some(Found::Long));
                }
                return Ok(Some(Found::Records));
            }
            if (self.ended || block.len() > self.limit) && open {
                let lines = self.skip_open_quote(block);
                return Ok(Some(Found::OpenQuote { lines }));
            }
            if block.len() > self.limit {
                self.skip_line(block)?;
                return Ok(Some(Found::Long));
            }
            size = (2 * size).min(self.limit.saturating_add(1)).max(block.len() + 1);
        }
    }

    /// Drops the line with the open quotation mark, since what follows it may be sound; but where that has failed
    /// many times in a row, everything that was searched for the closing mark, so that the time spent stays
    /// proportional to the bytes read.
    fn skip_open_quote(&mut self, block: &mut Vec<u8>) -> u64 {
        self.open_quotes += 1;
        let end = match self.open_quotes {
            ..=16 => memchr::memchr(b'\n', block),
            _ => memchr::memrchr(b'\n', block),
        };
        let end = end.map_or(block.len(), |at| at + 1);
        let lines = count_lines(&block[..end]);
        self.rest.extend_from_slice(&block[end..]);
        block.clear();
        lines
    }

    /// Drops bytes up to and with the first newline, and keeps the rest.
    fn skip_line(&mut self, block: &mut Vec<u8>) -> io::Result<()> {
        loop {
            if let Some(end) = memchr::memchr(b'\n', block) {
                self.rest.extend_from_slice(&block[end + 1..]);
                block.clear();
                return Ok(());
            }
            block.clear();
            self.fill(block, BLOCK)?;
            if block.is_empty() {
                return Ok(());
            }
        }
    }

    /// Reads until `block` has `size` bytes or the input ends.
    fn fill(&mut self, block: &mut Vec<u8>, size: usize) -> io::Result<()> {
        while block.len() < size && !self.ended {
            let wanted = size - block.len();
            let got = self.reader.by_ref().take(wanted as u64).read_to_end(block)?;
            self.read += got as u64;
            self.ended = got < wanted;
        }
        Ok(())
    }
}

impl Records {
    /// Where the first record of `bytes` ends, if it does.
    pub(super) fn first_end(self, bytes: &[u8]) -> Option<usize> {
        match self {
            Records::Lines => memchr::memchr(b'\n', bytes).map(|at| at + 1),
            Records::Rows { delimiter } => row_ends(bytes, delimiter).next(),
        }
    }

    /// Where the last record of `bytes` that has an end has it.
    pub(super) fn last_end(self, bytes: &[u8]) -> Option<usize> {
        match self {
            Records::Rows { delimiter } if memchr::memchr(b'"', bytes).is_some() => {
                row_ends(bytes, delimiter).last()
            }
            _ => memchr::memrchr(b'\n', bytes).map(|at| at + 1),
        }
    }
}

/// Where rows end: after newlines outside quotation marks.
fn row_ends(bytes: &[u8], delimiter: u8) -> impl Iterator<Item = usize> {
    enum State {
        CellStart,
        Plain,
        Quoted,
        /// After a quotation mark inside quotation marks: the first of two, or the closing one.
        Closing,
    }
    let mut state = State::CellStart;
    bytes.iter().enumerate().filter_map(move |(at, &byte)| {
        state = match (&state, byte) {
            (State::Quoted, b'"') => State::Closing,
            (State::Quoted, _) | (State::CellStart | State::Closing, b'"') => State::Quoted,
            (_, b'\n' | b'\r') => State::CellStart,
            (_, byte) if byte == delimiter => State::CellStart,
            _ => State::Plain,
        };
        (byte == b'\n' && !matches!(state, State::Quoted)).then_some(at + 1)
    })
}

/// Lines of a block: its newlines, and the last line if it has none.
pub(super) fn count_lines(block: &[u8]) -> u64 {
    let newlines = memchr::memchr_iter(b'\n', block).count() as u64;
    newlines + u64::from(block.last().is_some_and(|&byte| byte != b'\n'))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    const ROWS: Records = Records::Rows { delimiter: b',' };

    fn all(bytes: &[u8], records: Records, limit: usize) -> Vec<(Found, String)> {
        let mut blocks = Blocks::new(bytes, limit);
        let (mut block, mut out) = (Vec::new(), Vec::new());
        while let Some(found) = blocks.next(&mut block, records).unwrap() {
            out.push((found, String::from_utf8_lossy(&block).into_owned()));
        }
        out
    }

    #[test]
    fn a_long_line_costs_only_itself() {
        let long = "x".repeat(3 * BLOCK);
        let text = format!("{long}\nshort\n");
        let found = all(text.as_bytes(), Records::Lines, 1000);
        assert_eq!(found, [(Found::Long, String::new()), (Found::Records, "short\n".into())]);
        assert_eq!(all(long.as_bytes(), Records::Lines, 1000), [(Found::Long, String::new())]);
        // Within the limit a record may span many blocks.
        assert_eq!(all(text.as_bytes(), Records::Lines, 1 << 30).len(), 1);
    }

    #[test]
    fn an_open_quote_costs_only_its_line() {
        let found = all(b"a,\"b\nc,d\ne,f", ROWS, 1000);
        assert_eq!(
            found,
            [
                (Found::OpenQuote { lines: 1 }, String::new()),
                (Found::Records, "c,d\n".into()),
                (Found::Records, "e,f".into())
            ]
        );
    }

    #[test]
    fn quotes_left_open_in_every_line_cost_no_more_than_a_pass() {
        let text = "a\"b,\"\n".repeat(100_000);
        let found = all(text.as_bytes(), ROWS, 1000);
        assert!(found.len() < 100, "{}", found.len());
        let lines = found.iter().map(|(found, _)| match found {
            Found::OpenQuote { lines } => *lines,
            _ => 0,
        });
        assert_eq!(lines.sum::<u64>(), 100_000);
    }

    #[test]
    fn a_newline_in_quotes_ends_no_row() {
        assert_eq!(ROWS.first_end(b"a,\"b\n\"\"\nc\"\nd"), Some(11));
        assert_eq!(ROWS.first_end(b"a,b\"\nc"), Some(5));
        assert_eq!(ROWS.first_end(b"\"a\"x\"\nc"), Some(6));
    }

    proptest! {
        // The csv crate decides what a row is; we must cut only between rows.
        #[test]
        fn rows_end_where_the_csv_crate_ends_them(text in "[a\",\n\r]{0,40}") {
            let read = |bytes: &[u8]| -> Vec<Vec<Vec<u8>>> {
                ::csv::ReaderBuilder::new().has_headers(false).flexible(true).from_reader(bytes).byte_records()
                    .map(|row| row.unwrap().iter().map(<[u8]>::to_vec).collect()).collect()
            };
            let whole = read(text.as_bytes());
            for end in row_ends(text.as_bytes(), b',') {
                let mut parts = read(&text.as_bytes()[..end]);
                parts.extend(read(&text.as_bytes()[end..]));
                prop_assert_eq!(&parts, &whole);
            }
        }
    }
}
