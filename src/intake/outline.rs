//! What must be known of an input so that a later part of it can be read by itself: its format and its header.

use super::blocks::Records;
use super::error::IntakeError;
use super::feed::find_format;
use super::{Format, Options, csv};

/// Format and header of an input that is read in parts.
#[derive(Clone, Debug)]
pub(crate) struct Outline {
    pub(crate) format: Format,
    /// The bytes to put before a part that does not begin at the input's start.
    pub(crate) header: Vec<u8>,
    records: Records,
}

impl Outline {
    /// From the first bytes of an input; `None` while they do not tell it yet.
    ///
    /// # Errors
    /// [`IntakeError::Unrecognised`] for what is no input of waits.
    pub(crate) fn of(head: &[u8], file: &str, options: &Options) -> Result<Option<Outline>, IntakeError> {
        const MARK: &[u8] = b"\xef\xbb\xbf";
        let marked = head.len() - head.strip_prefix(MARK).unwrap_or(head).len();
        let blank = head.iter().skip(marked).take_while(|byte| byte.is_ascii_whitespace()).count();
        let from = marked + blank;
        let Some(first) = Records::Lines.first_end(&head[from..]) else { return Ok(None) };
        let format = find_format(&head[from..], file, options)?;
        let mut outline = Outline { format, header: Vec::new(), records: Records::Lines };
        if format == Format::Csv {
            let delimiter = csv::delimiter(&head[from..from + first]);
            outline.records = Records::Rows { delimiter };
            match outline.records.first_end(&head[from..]) {
                Some(end) => outline.header = head[..from + end].into(),
                None => return Ok(None),
            }
        }
        Ok(Some(outline))
    }

    /// How many of the bytes are whole records.
    pub(crate) fn whole(&self, bytes: &[u8]) -> usize {
        self.records.last_end(bytes).unwrap_or(0)
    }
}
