//! `--pictures DIR`: a stream's pictures as files, and a page of them all.

use std::path::PathBuf;

use clap::Args;

use super::exit::Failure;
use super::files::{Folder, file_name};
use crate::advise::Curves;
use crate::chart::{Figure, Frame, Picture, Section, Svg, at_both_widths, page};

/// Width of a picture unless said, px: a column of text.
const WIDTH: u32 = 800;
/// With more streams the page only links to the pictures; it would be too large to open.
const MOST_SHOWN: usize = 60;

/// Where pictures go.
#[derive(Clone, Debug, Default, Args)]
pub(super) struct Pictures {
    /// Draw the pictures into this folder (made if need be), with index.html to look at them all
    #[arg(long = "pictures", value_name = "DIR")]
    folder: Option<PathBuf>,
    /// Their width in pixels
    #[arg(
        long = "picture-width",
        value_name = "PX",
        requires = "folder",
        value_parser = clap::value_parser!(u32).range(i64::from(Frame::NARROWEST)..=i64::from(Frame::WIDEST))
    )]
    width: Option<u32>,
}

/// The folder of a run and what is drawn for how many streams.
pub(super) struct Album {
    folder: Folder,
    width: u32,
    shown: bool,
}

impl Pictures {
    /// The folder, if one was named.
    pub(super) fn open(&self, streams: usize) -> Result<Option<Album>, Failure> {
        let open = |path: &PathBuf| {
            let folder = Folder::open(path)?;
            Ok(Album { folder, width: self.width.unwrap_or(WIDTH), shown: streams <= MOST_SHOWN })
        };
        self.folder.as_ref().map(open).transpose()
    }
}

impl Album {
    /// Draws a stream's pictures into files; `number` is its place among the streams. What the page shows of them.
    pub(super) fn stream(&self, curves: &Curves, number: usize, note: String) -> Result<Section, Failure> {
        let figures = Picture::ALL.map(|picture| {
            let draw = |frame: &Frame<'_>| picture.draw(curves, frame);
            self.figure(&curves.stream, picture.name(), number, &draw)
        });
        let figures = figures.into_iter().collect::<Result<_, _>>()?;
        Ok(Section { heading: curves.stream.clone(), note, figures })
    }

    /// Draws one picture into a file.
    pub(super) fn figure(
        &self,
        stream: &str,
        name: &str,
        number: usize,
        draw: &dyn Fn(&Frame<'_>) -> Svg,
    ) -> Result<Figure, Failure> {
        let alone = draw(&Frame { width: self.width, prefix: name, styled: true });
        let file = format!("{}-{name}.svg", file_name(stream, number));
        self.folder.put(&file, &alone.markup)?;
        let prefix = format!("s{number}-{name}");
        let svg = self.shown.then(|| at_both_widths(self.width, &prefix, draw));
        Ok(Figure { file, title: alone.title, svg })
    }

    /// Writes the page.
    pub(super) fn page(&self, title: &str, lead: &str, sections: &[Section]) -> Result<(), Failure> {
        self.folder.put("index.html", &page(title, lead, sections))
    }
}
