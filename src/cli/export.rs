//! `outwait export`: settled times in the form that another system reads.

use std::ffi::OsString;
use std::fs;
use std::path::{Path, PathBuf};

use anyhow::{Context, anyhow};
use clap::{Args, ValueEnum};
use similar::TextDiff;

use super::basis::{self, Basis};
use super::exit::{Exit, Failure, OrExit, print};
use super::files;
use super::options::Common;
use crate::advise::Terms;
use crate::export::{self, Export};
use crate::glob::Glob;

const EXAMPLES: &str = "\
Examples:
  outwait export --settled settled.yaml --policy policy.yaml --format env --output timeouts.env
  outwait export --settled settled.yaml --template grpc.json.j2 --output service_config.json --check
  outwait export --proposed --waits waits.ndjson --policy policy.yaml --format json

Only what was settled is exported; --proposed adds what is proposed for the rest. examples/templates has templates.
Exit codes: 0 well, 1 --check found a difference, 2 wrong usage, 3 bad input, 5 the system failed.";

/// A form that needs no template.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Form {
    /// One JSON document
    #[default]
    Json,
    /// The same document as YAML
    Yaml,
    /// Lines of NAME=value
    #[value(alias = "text")]
    Env,
    /// Metrics text
    Metrics,
}

/// Arguments of `export`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct ExportArguments {
    /// In which form
    #[arg(long, value_enum, default_value_t)]
    format: Form,
    /// A template of your own instead (Jinja; see the README for its names and filters)
    #[arg(long, value_name = "FILE", conflicts_with = "format")]
    template: Option<PathBuf>,
    /// Where to write it; standard output unless said
    #[arg(long, value_name = "FILE")]
    output: Option<PathBuf>,
    /// Write nothing; show how the file differs from what would be written
    #[arg(long, requires = "output")]
    check: bool,
    /// Also what is proposed where nothing is settled
    #[arg(long)]
    proposed: bool,
    /// Files of waits, for what is proposed and for its cautions
    #[arg(long, value_name = "FILE", num_args = 1.., conflicts_with_all = ["advice", "from", "data"])]
    waits: Vec<OsString>,
    #[command(flatten)]
    basis: Basis,
    /// Policy file: what waiting is worth, stream by stream
    #[arg(long, value_name = "FILE")]
    policy: Option<PathBuf>,
    /// Only these streams (`*` any run of characters, `?` one)
    #[arg(long, value_name = "GLOB", value_parser = super::options::selector)]
    stream: Option<Glob>,
}

impl ExportArguments {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let export = self.export()?;
        let text = self.render(&export)?;
        if !self.check {
            basis::put(&text, self.output.as_deref())?;
            return Ok(Exit::Well);
        }
        let path = self.output.as_deref().unwrap_or(Path::new("-"));
        let old = String::from_utf8_lossy(&files::read(path)?).into_owned();
        if old == text {
            return Ok(Exit::Well);
        }
        let name = path.display().to_string();
        let difference = TextDiff::from_lines(&old, &text);
        print(&difference.unified_diff().header(&name, &format!("{name} (as settled)")).to_string())?;
        Ok(Exit::Shut)
    }

    fn export(&self) -> Result<Export, Failure> {
        // Of a daemon's folder what was settled is wanted first; its waits only for what is proposed.
        let looks =
            !self.waits.is_empty() || self.basis.advises() && (self.basis.data.is_none() || self.proposed);
        if self.basis.settled_file().is_none() && !self.proposed {
            return Err(Failure::new(Exit::Usage, anyhow!("nothing says what was settled"))
                .with_remedy("name `--settled FILE` or `--data DIR`, or ask for what is `--proposed`"));
        }
        if self.proposed && !looks {
            return Err(Failure::new(Exit::Usage, anyhow!("nothing says what is proposed"))
                .with_remedy("name `--waits FILE`, `--data DIR`, `--advice FILE` or `--from URL`"));
        }
        let common = Common::of(self.policy.clone(), self.stream.clone());
        let policy = common.load_policy()?;
        let settled = self.basis.settled()?;
        let past = settled.past(basis::clock());
        let terms = Terms { policy: policy.as_ref(), newest: None, seed: 1, past: Some(&past) };
        let set = match looks {
            true => Some(self.basis.weigh(&self.waits, policy.as_ref(), Some(&past), &common, |_| ())?.set),
            false => None,
        };
        let mut export = export::export(&settled, set.as_ref(), |stream| terms.entry(stream));
        export.streams.retain(|one| {
            (self.proposed || one.status != "proposed")
                && self.stream.as_ref().is_none_or(|glob| glob.matches(&one.stream))
        });
        Ok(export)
    }

    fn render(&self, export: &Export) -> Result<String, Failure> {
        if let Some(file) = &self.template {
            let name = file.display().to_string();
            let text = fs::read_to_string(file).with_context(|| format!("cannot read the template {name}"));
            let text = text.or_exit(Exit::BadInput)?;
            return export::render(&text, &name, export).map_err(|error| {
                let remedy = error.remedy.clone();
                Failure::new(Exit::BadInput, error).with_remedy(remedy)
            });
        }
        match self.format {
            Form::Json => serde_json::to_string_pretty(export)
                .map(|json| json + "\n")
                .context("cannot write JSON")
                .or_exit(Exit::System),
            Form::Yaml => serde_yaml::to_string(export).context("cannot write YAML").or_exit(Exit::System),
            Form::Env => export::environment(export).map_err(|error| {
                Failure::new(Exit::BadInput, error)
                    .with_remedy("export them apart with --stream, or name them by a template")
            }),
            Form::Metrics => Ok(export::metrics(export)),
        }
    }
}
