//! Record batches of the Arrow IPC format. A file is a stream between a magic word and a footer, and is read as one.

use std::io::{self, Read};
use std::sync::Arc;

use arrow_buffer::Buffer;
use arrow_ipc::convert::try_fb_to_schema;
use arrow_ipc::reader::FileDecoder;
use arrow_ipc::{Block, Message, MessageHeader, MetadataVersion, RecordBatch as Batch, root_as_message};
use arrow_schema::Schema;

use super::cells::unlettered;
use super::{ColumnsError, Next, Options, Part, Plan, Table, find, guarded};

/// Most rows of one batch, and most bytes of one unpacked. The decoder makes room for what a message says before it looks
/// at it, so what it says is looked at first.
const MOST_ROWS: i64 = 1 << 24;
const MOST_BYTES: i64 = 1 << 30;

/// Most bytes of a message that room is made for before they are there.
const ROOM: u64 = 1 << 24;

/// What begins each message.
const CONTINUATION: [u8; 4] = [0xff; 4];

const MAGIC: &[u8] = b"ARROW1";

/// How often eight zero bytes may follow a file's magic word: some writers fill up to 64 bytes.
const MOST_FILLING: u8 = 7;

/// The batches that are left. The columns of a batch are parts of its message, which is not copied.
pub(in crate::intake) struct Batches {
    messages: Messages,
    decoder: FileDecoder,
}

impl Batches {
    pub(super) fn open(
        mut reader: Box<dyn Read + Send>,
        is_file: bool,
        options: &Options,
    ) -> Result<(Table, Arc<Plan>), ColumnsError> {
        if is_file {
            // The magic word, and what fills it up to eight bytes.
            io::copy(&mut reader.by_ref().take(8), &mut io::sink()).map_err(damaged)?;
        }
        let filling = if is_file { MOST_FILLING } else { 0 };
        let mut messages = Messages { reader, is_file, filling, ended: false };
        let first = messages.next().map_err(damaged)?;
        let schema = guarded(|| {
            let message = first.as_ref().and_then(|message| root_as_message(message.head()).ok());
            let schema = message.and_then(|message| message.header_as_schema());
            let first = || ColumnsError::Damaged { reason: "it does not begin with a schema".into() };
            try_fb_to_schema(schema.ok_or_else(first)?).map_err(ColumnsError::arrow)
        })?;
        let used = find(&schema, options)?;
        // Whether texts are such is asked of each that is met, not of each row.
        let fields = schema.fields().iter();
        let fields = fields.map(|field| field.as_ref().clone().with_data_type(unlettered(field.data_type())));
        let schema = Schema::new(fields.collect::<Vec<_>>());
        // Other columns are not even decoded.
        let wanted = used.iter().map(|&(index, ..)| index).collect();
        // By this version the messages are not held to have one and the same: those of a stream need not.
        let decoder = FileDecoder::new(Arc::new(schema), MetadataVersion::V1).with_projection(wanted);
        Ok((Table::Arrow(Batches { messages, decoder }), Arc::new(Plan::new(used))))
    }

    pub(super) fn next(&mut self) -> Result<Option<Next>, ColumnsError> {
        while let Some(message) = self.messages.next().map_err(damaged)? {
            let Whole { bytes, block, unpacked, .. } = &message;
            let kind = root_as_message(message.head()).ok().map(|message| message.header_type());
            if kind == Some(MessageHeader::DictionaryBatch) {
                guarded(|| self.decoder.read_dictionary(block, bytes).map_err(ColumnsError::arrow))?;
                continue;
            }
            let batch =
                guarded(|| self.decoder.read_record_batch(block, bytes).map_err(ColumnsError::arrow))?;
            let nothing = || ColumnsError::Damaged { reason: "a message holds nothing".into() };
            let bytes = bytes.len() as u64 + unpacked;
            return Ok(Some(Next { part: Part::Batch(batch.ok_or_else(nothing)?), passed: 0, bytes }));
        }
        Ok(None)
    }
}

fn damaged(error: io::Error) -> ColumnsError {
    ColumnsError::Damaged { reason: error.to_string() }
}

/// A message of which what it says of itself can be true.
struct Whole {
    bytes: Buffer,
    /// How much of it is its head.
    head: usize,
    block: Block,
    /// Bytes that its packed buffers say they make.
    unpacked: u64,
}

impl Whole {
    /// What it says of itself, behind its length.
    fn head(&self) -> &[u8] {
        self.bytes.get(8..self.head).unwrap_or_default()
    }
}

/// The messages of a stream.
struct Messages {
    reader: Box<dyn Read + Send>,
    is_file: bool,
    /// How much filling may still come.
    filling: u8,
    ended: bool,
}

impl Messages {
    /// The next message; `None` after the last.
    fn next(&mut self) -> io::Result<Option<Whole>> {
        if self.ended {
            return Ok(None);
        }
        let cut_off = || invalid("it ends within a message".into());
        let mut bytes = Vec::new();
        self.read(8, &mut bytes)?;
        while self.filling > 0 && *bytes == [0; 8] {
            self.filling -= 1;
            bytes.clear();
            self.read(8, &mut bytes)?;
        }
        self.filling = 0;
        let length = match (bytes.first_chunk::<4>(), bytes.last_chunk::<4>()) {
            // Some writers just end, old ones with a length of nothing.
            (None | Some([0, 0, 0, 0]), _) => {
                self.ended = true;
                return Ok(None);
            }
            (Some(&CONTINUATION), Some(length)) if bytes.len() == 8 => i32::from_le_bytes(*length),
            (Some(&CONTINUATION), _) => return Err(cut_off()),
            _ => return Err(invalid("a message does not begin like one".into())),
        };
        let length = match u64::try_from(length) {
            Ok(0) => {
                self.ended = true;
                return self.end().map(|()| None);
            }
            Ok(length) => length,
            Err(_) => return Err(invalid(format!("a message is {length} bytes long"))),
        };
        if self.read(length, &mut bytes)? < length {
            return Err(cut_off());
        }
        let head = bytes.len();
        let message = root_as_message(bytes.get(8..).unwrap_or_default());
        let message = message.map_err(|error| invalid(format!("a message cannot be read: {error}")))?;
        let body = message.bodyLength();
        let body = u64::try_from(body).map_err(|_| invalid(format!("a body is {body} bytes long")))?;
        if self.read(body, &mut bytes)? < body {
            return Err(cut_off());
        }
        let (front, behind) = bytes.split_at(head);
        let unpacked = match root_as_message(front.get(8..).unwrap_or_default()) {
            Ok(message) => check(&message, behind).map_err(invalid)?,
            Err(_) => 0,
        };
        let lengths = i32::try_from(head).ok().zip(i64::try_from(behind.len()).ok());
        let (front, behind) = lengths.ok_or_else(cut_off)?;
        let block = Block::new(0, front, behind);
        Ok(Some(Whole { bytes: Buffer::from_vec(bytes), head, block, unpacked }))
    }

    /// Reads so many bytes, or all that are left.
    fn read(&mut self, length: u64, bytes: &mut Vec<u8>) -> io::Result<u64> {
        bytes.reserve_exact(length.min(ROOM) as usize);
        self.reader.by_ref().take(length).read_to_end(bytes).map(|read| read as u64)
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
            false => Err(invalid("its footer is not whole".into())),
        }
    }
}

fn invalid(why: String) -> io::Error {
    io::Error::new(io::ErrorKind::InvalidData, why)
}

/// Whether what a message says of its rows and buffers can be true of its body, and how many bytes packed ones make.
fn check(message: &Message<'_>, body: &[u8]) -> Result<u64, String> {
    let batch: Option<Batch<'_>> = match message.header_as_dictionary_batch() {
        Some(dictionary) => dictionary.data(),
        None => message.header_as_record_batch(),
    };
    let Some(batch) = batch else { return Ok(0) };
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
    Ok(unpacked.unsigned_abs())
}
