//! Inputs that are read twice. What cannot be read again (standard input, a pipe) is copied as it is read the first time,
//! into a file without a name, which is gone when the program ends, however it ends.

use std::fs::File;
use std::io::{self, Read, Seek, Write};
use std::path::PathBuf;

use anyhow::Context;

use super::exit::{Exit, Failure, OrExit};
use super::options::{Asked, Reading};
use crate::intake::Source;

/// The named files, for two passes.
pub(super) struct Twice(Vec<Input>);

enum Input {
    File(PathBuf),
    /// Its name in messages, and the copy.
    Copied(String, File),
    /// Asked again; rows that came in between are in the second answer only.
    Asked(Box<Asked>),
}

impl Twice {
    /// Prepares two passes; the sources are those of the first.
    pub(super) fn new(reading: &Reading) -> Result<(Twice, Vec<Source>), Failure> {
        let mut inputs = Vec::new();
        let mut sources = Vec::new();
        for file in &reading.files {
            let path = PathBuf::from(file);
            let standard_input = file == "-";
            // What is no file at all is for the reader to complain of.
            let again = path.metadata().is_ok_and(|m| !m.is_file() && !m.is_dir());
            if !standard_input && !again {
                sources.push(Source::path(&path));
                inputs.push(Input::File(path));
                continue;
            }
            let name = if standard_input { "standard input".to_owned() } else { path.display().to_string() };
            let copy = tempfile::tempfile().and_then(|copy| Ok((copy.try_clone()?, copy)));
            let (copy, kept) = copy
                .with_context(|| format!("cannot make a temporary file to read {name} twice"))
                .map_err(|error| {
                    Failure::new(Exit::System, error).with_remedy(
                        "name a folder with room in TMPDIR, or write the waits into a file first",
                    )
                })?;
            let reader: Box<dyn Read + Send> = if standard_input {
                Box::new(io::stdin())
            } else {
                Box::new(
                    File::open(&path)
                        .with_context(|| format!("cannot open {name}"))
                        .or_exit(Exit::BadInput)?,
                )
            };
            sources.push(Source::reader(&name, Tee { reader, copy }));
            inputs.push(Input::Copied(name, kept));
        }
        if let Some(source) = reading.asked.source()? {
            sources.push(source);
            inputs.push(Input::Asked(Box::new(reading.asked.clone())));
        }
        Ok((Twice(inputs), sources))
    }

    /// The sources of the second pass.
    pub(super) fn again(self) -> Result<Vec<Source>, Failure> {
        let source = |input| match input {
            Input::File(path) => Ok(Some(Source::path(path))),
            Input::Copied(name, mut copy) => {
                copy.rewind().with_context(|| format!("cannot read {name} again")).or_exit(Exit::System)?;
                Ok(Some(Source::reader(name, copy)))
            }
            Input::Asked(asked) => asked.source(),
        };
        self.0.into_iter().filter_map(|input| source(input).transpose()).collect()
    }
}

/// Copies what is read.
struct Tee {
    reader: Box<dyn Read + Send>,
    copy: File,
}

impl Read for Tee {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let n = self.reader.read(buffer)?;
        self.copy.write_all(&buffer[..n])?;
        Ok(n)
    }
}
