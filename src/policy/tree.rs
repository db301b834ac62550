//! YAML text -> a tree in which every key and value knows its place. Values stay text: what one is follows from
//! its key, so that `no`, `1e3` or `12` are never taken for something else.
//!
//! Bounded: size, depth, and the number of values once aliases are followed. An alias shares the value it names.

use super::finding::{Fault, Place, Slip, shown};
use super::keys::{MAX_DEPTH, MAX_VALUES};
use saphyr_parser::{Event, Marker, Parser, ScalarStyle, Tag};
use std::borrow::Cow;
use std::collections::HashMap;
use std::rc::Rc;

/// A value and where it stands.
#[derive(Debug)]
pub(crate) struct Node {
    pub(crate) at: Place,
    pub(crate) value: Value,
    /// Number of values in it, aliases followed.
    size: usize,
}

#[derive(Debug)]
pub(crate) enum Value {
    /// `plain`: written without quotes.
    Scalar {
        text: String,
        plain: bool,
    },
    List(Vec<Rc<Node>>),
    /// Keys are distinct.
    Map(Vec<Pair>),
}

/// A key with its value.
#[derive(Debug)]
pub(crate) struct Pair {
    pub(crate) at: Place,
    pub(crate) key: String,
    pub(crate) value: Rc<Node>,
}

impl Node {
    /// Where the value under a key stands; where the node does, if there is none.
    pub(crate) fn place(&self, key: &str) -> Place {
        let Value::Map(pairs) = &self.value else { return self.at };
        pairs.iter().find(|pair| pair.key == key).map_or(self.at, |pair| pair.value.at)
    }

    /// Whether nothing was written: `key:`, `~` or `null`.
    pub(crate) fn is_null(&self) -> bool {
        matches!(&self.value, Value::Scalar { text, plain: true }
            if matches!(text.as_str(), "" | "~" | "null" | "Null" | "NULL"))
    }
}

/// Reads one document. `None` and no fault: there is none. Duplicate keys and tags are told, and reading goes on;
/// every other fault ends it.
pub(crate) fn read(text: &str, tell: &mut dyn FnMut(Place, Fault)) -> Option<Rc<Node>> {
    let mut builder = Builder { open: Vec::new(), anchors: HashMap::new(), root: None, size: 0, tell };
    let mut documents = 0;
    for event in Parser::new_from_str(text) {
        let (event, span) = match event {
            Ok(event) => event,
            Err(error) => {
                let at = place(error.marker());
                let message = error.info().to_owned();
                let slip = Slip::guess(text, at, &message);
                (builder.tell)(at, Fault::Syntax { message, slip });
                return None;
            }
        };
        if let Event::DocumentStart(_) = event {
            documents += 1;
        }
        let at = place(&span.start);
        let step = if documents > 1 { Err(Fault::Documents) } else { builder.take(event, at) };
        if let Err(fault) = step {
            (builder.tell)(at, fault);
            return None;
        }
    }
    builder.root
}

fn place(marker: &Marker) -> Place {
    Place { line: marker.line().max(1), column: marker.col() + 1 }
}

impl Slip {
    fn guess(text: &str, at: Place, message: &str) -> Slip {
        let line = text.lines().nth(at.line - 1).unwrap_or_default();
        let indent = &line[..line.len() - line.trim_start().len()];
        if indent.contains('\t') || message.contains("tab") {
            Slip::Tab
        } else if message.contains("anchor") || message.contains("alias") {
            Slip::Star
        } else {
            Slip::Other
        }
    }
}

struct Builder<'t> {
    open: Vec<Open>,
    anchors: HashMap<usize, Rc<Node>>,
    root: Option<Rc<Node>>,
    size: usize,
    tell: &'t mut dyn FnMut(Place, Fault),
}

/// A list or map whose end has not come.
struct Open {
    at: Place,
    anchor: usize,
    size: usize,
    content: Content,
}

enum Content {
    List(Vec<Rc<Node>>),
    Map { pairs: Vec<Pair>, lines: HashMap<String, usize>, key: Option<(Place, String)> },
}

impl Builder<'_> {
    fn take(&mut self, event: Event<'_>, at: Place) -> Result<(), Fault> {
        match event {
            Event::Scalar(text, style, anchor, tag) => {
                self.refuse_tag(tag, at);
                let value =
                    Value::Scalar { text: text.into_owned(), plain: matches!(style, ScalarStyle::Plain) };
                self.close(Node { at, value, size: 1 }, anchor)
            }
            Event::Alias(anchor) => {
                let node = self.anchors.get(&anchor).cloned().ok_or(Fault::Circular)?;
                self.add(node, at)
            }
            Event::SequenceStart(anchor, tag) => {
                self.refuse_tag(tag, at);
                self.begin(at, anchor, Content::List(Vec::new()))
            }
            Event::MappingStart(anchor, tag) => {
                self.refuse_tag(tag, at);
                self.begin(at, anchor, Content::Map { pairs: Vec::new(), lines: HashMap::new(), key: None })
            }
            Event::SequenceEnd | Event::MappingEnd => {
                let Some(Open { at, anchor, size, content }) = self.open.pop() else { return Ok(()) };
                let value = match content {
                    Content::List(items) => Value::List(items),
                    Content::Map { pairs, .. } => Value::Map(pairs),
                };
                self.close(Node { at, value, size: size + 1 }, anchor)
            }
            Event::Nothing
            | Event::StreamStart
            | Event::StreamEnd
            | Event::DocumentStart(_)
            | Event::DocumentEnd => Ok(()),
        }
    }

    fn refuse_tag(&mut self, tag: Option<Cow<'_, Tag>>, at: Place) {
        if let Some(tag) = tag {
            let written =
                if tag.is_yaml_core_schema() { format!("!!{}", tag.suffix) } else { tag.to_string() };
            (self.tell)(at, Fault::Tag { tag: shown(&written) });
        }
    }

    fn begin(&mut self, at: Place, anchor: usize, content: Content) -> Result<(), Fault> {
        if self.open.len() == MAX_DEPTH {
            return Err(Fault::Deep);
        }
        self.open.push(Open { at, anchor, size: 0, content });
        Ok(())
    }

    fn close(&mut self, node: Node, anchor: usize) -> Result<(), Fault> {
        let at = node.at;
        let node = Rc::new(node);
        if anchor != 0 {
            self.anchors.insert(anchor, Rc::clone(&node));
        }
        self.add(node, at)
    }

    /// Puts a finished value where it belongs; `at` is where it is used, which for an alias is not where it stands.
    fn add(&mut self, node: Rc<Node>, at: Place) -> Result<(), Fault> {
        let Some(open) = self.open.last_mut() else {
            self.root = Some(node);
            return Ok(());
        };
        open.size += node.size;
        self.size += 1;
        if open.size > MAX_VALUES || self.size > MAX_VALUES {
            return Err(Fault::Expands);
        }
        match &mut open.content {
            Content::List(items) => items.push(node),
            Content::Map { pairs, lines, key } => match (key.take(), &node.value) {
                (None, Value::Scalar { text, .. }) => *key = Some((at, text.clone())),
                (None, _) => return Err(Fault::KeyShape),
                (Some((at, name)), _) => match lines.get(&name) {
                    Some(&first) => (self.tell)(at, Fault::Duplicate { key: shown(&name), first }),
                    None => {
                        lines.insert(name.clone(), at.line);
                        pairs.push(Pair { at, key: name, value: node });
                    }
                },
            },
        }
        Ok(())
    }
}
