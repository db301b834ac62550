//! Record batches of the Arrow IPC format. A file is a stream between a magic word and a footer, and is read as one.

use std::io::{self, Cursor, Read};
use std::sync::Arc;

use arrow_array::RecordBatch;
use arrow_ipc::convert::try_fb_to_schema;
use arrow_ipc::reader::StreamReader;
use arrow_ipc::{Message, RecordBatch as Batch, root_as_message};
use arrow_schema::ArrowError;

use super::{ColumnsError, Next, Options, Part, Plan, Table, find, guarded};

/// Most rows of one batch, and most bytes of one unpacked. The decoder makes room for what a message says before it looks
/// at it, so what it says is looked at first.
const MOST_ROWS: i64 = 1 << 24;
const MOST_BYTES: i64 = 1 << 30;

/// What begins each message.
const CONTINUATION: [u8; 4] = [0xff; 4];

const MAGIC: &[u8] = b"ARROW1";

/// How often eight zero bytes may follow a file's magic word: some writers fill up to 64 bytes.
const MOST_FILLING: u8 = 7;

/// The batches that are left.
pub(in crate::intake) struct Batches(StreamReader<Messages>);

impl Batches {
    pub(super) fn open(
        mut reader: Box<dyn Read + Send>,
        is_file: bool,
        options: &Options,
    ) -> Result<(Table, Arc<Plan>), ColumnsError> {
        let damaged = |error: io::Error| ColumnsError::Damaged { reason: error.to_string() };
        if is_file {
            // The magic word, and what fills it up to eight bytes.
            io::copy(&mut reader.by_ref().take(8), &mut io::sink()).map_err(damaged)?;
        }
        let filling = if is_file { MOST_FILLING } else { 0 };
        let mut messages = Messages { reader, ready: Cursor::default(), is_file, filling, ended: false };
        messages.advance().map_err(damaged)?;
        let schema = guarded(|| {
            let message = root_as_message(messages.ready.get_ref().get(8..).unwrap_or_default());
            let schema = message.ok().and_then(|message| message.header_as_schema());
            let first = || ColumnsError::Damaged { reason: "it does not begin with a schema".into() };
            try_fb_to_schema(schema.ok_or_else(first)?).map_err(ColumnsError::arrow)
        })?;
        let used = find(&schema, options)?;
        // Other columns are not even decoded.
        let wanted = used.iter().map(|&(index, ..)| index).collect();
        let reader = guarded(|| StreamReader::try_new(messages, Some(wanted)).map_err(ColumnsError::arrow))?;
        Ok((Table::Arrow(Batches(reader)), Arc::new(Plan::new(used))))
    }

    pub(super) fn next(&mut self) -> Result<Option<Next>, ColumnsError> {
        let batch: Option<Result<RecordBatch, ArrowError>> = guarded(|| Ok(self.0.next()))?;
        let Some(batch) = batch else { return Ok(None) };
        let batch = batch.map_err(ColumnsError::arrow)?;
        let bytes = batch.get_array_memory_size() as u64;
        Ok(Some(Next { part: Part::Batch(batch), passed: 0, bytes }))
    }
}

/// The messages of a stream, each handed on once what it says of itself can be true.
struct Messages {
    reader: Box<dyn Read + Send>,
    /// The message that is handed on.
    ready: Cursor<Vec<u8>>,
    is_file: bool,
    /// How much filling may still come.
    filling: u8,
    ended: bool,
}

impl Messages {
    /// Reads the next message whole. What is cut off is handed on as it is; the decoder says so.
    fn advance(&mut self) -> io::Result<()> {
        let bytes = self.ready.get_mut();
        bytes.clear();
        self.ready.set_position(0);
        let bytes = self.ready.get_mut();
        self.ended = self.reader.by_ref().take(8).read_to_end(bytes)? < 8;
        while self.filling > 0 && *bytes == [0; 8] {
            self.filling -= 1;
            bytes.clear();
            self.ended = self.reader.by_ref().take(8).read_to_end(bytes)? < 8;
        }
        self.filling = 0;
        let length = |bytes: &[u8]| {
            let length = bytes.strip_prefix(&CONTINUATION)?.first_chunk::<4>()?;
            u64::try_from(i32::from_le_bytes(*length)).ok()
        };
        let length = match length(bytes) {
            Some(0) => {
                self.ended = true;
                return self.end();
            }
            Some(length) => length,
            None => {
                self.ended = true;
                return Ok(());
            }
        };
        self.ended |= (self.reader.by_ref().take(length).read_to_end(bytes)? as u64) < length;
        let Some(body) = root_as_message(bytes.get(8..).unwrap_or_default())
            .ok()
            .and_then(|message| u64::try_from(message.bodyLength()).ok())
        else {
            self.ended = true;
            return Ok(());
        };
        let from = bytes.len();
        self.ended |= (self.reader.by_ref().take(body).read_to_end(bytes)? as u64) < body;
        let (head, body) = bytes.split_at(from);
        match root_as_message(head.get(8..).unwrap_or_default()) {
            Ok(message) if !self.ended => check(&message, body),
            _ => Ok(()),
        }
        .map_err(|why| io::Error::new(io::ErrorKind::InvalidData, why))
    }

    /// After the last message of a file stands its footer, and the magic word again.
    fn end(&mut self) -> io::Result<()> {
        if !self.is_file {
            return Ok(());
        }
        let (mut last, mut part) = (Vec::new(), Vec::new());
        while self.reader.by_ref().take(64 * 1024).read_to_end(&mut part)? > 0 {
            last.extend_from_slice(&part[part.len().saturating_sub(MAGIC.len())..]);
            last.drain(..last.len().saturating_sub(MAGIC.len()));
            part.clear();
        }
        match last == MAGIC {
            true => Ok(()),
            false => Err(io::Error::new(io::ErrorKind::InvalidData, "its footer is not whole")),
        }
    }
}

impl Read for Messages {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        loop {
            let read = self.ready.read(buffer)?;
            if read > 0 || buffer.is_empty() || self.ended {
                return Ok(read);
            }
            self.advance()?;
        }
    }
}

/// Whether what a message says of its rows and buffers can be true of its body.
fn check(message: &Message<'_>, body: &[u8]) -> Result<(), String> {
    let batch: Option<Batch<'_>> = match message.header_as_dictionary_batch() {
        Some(dictionary) => dictionary.data(),
        None => message.header_as_record_batch(),
    };
    let Some(batch) = batch else { return Ok(()) };
    let lengths = batch.nodes().into_iter().flatten().map(|node| node.length());
    if let Some(rows) = lengths.chain([batch.length()]).find(|rows| !(0..=MOST_ROWS).contains(rows)) {
        return Err(format!("a batch of {rows} rows; at most {MOST_ROWS} are read, write smaller ones"));
    }
    let buffers = batch.buffers().into_iter().flatten();
    let counts = batch.variadicBufferCounts().into_iter().flatten();
    let many = batch.buffers().map_or(0, |buffers| buffers.len() as i64);
    if counts.into_iter().any(|count| !(0..=many).contains(&count)) {
        return Err("more buffers are named than there are".into());
    }
    let mut unpacked = 0i64;
    for buffer in buffers {
        let range = usize::try_from(buffer.offset()).ok().zip(usize::try_from(buffer.length()).ok());
        let bytes = range.and_then(|(from, length)| body.get(from..from.checked_add(length)?));
        let Some(bytes) = bytes else { return Err("a buffer lies outside its message".into()) };
        if batch.compression().is_some() && !bytes.is_empty() {
            let Some(length) = bytes.first_chunk::<8>() else {
                return Err("a packed buffer is cut off".into());
            };
            match i64::from_le_bytes(*length) {
                // Left as it is.
                -1 => {}
                length @ 0..=MOST_BYTES => unpacked += length,
                length => {
                    return Err(format!(
                        "a buffer of {length} bytes unpacked; at most {MOST_BYTES} are read"
                    ));
                }
            }
            if unpacked > MOST_BYTES {
                return Err(format!("a batch of more than {MOST_BYTES} bytes unpacked; write smaller ones"));
            }
        }
    }
    Ok(())
}
