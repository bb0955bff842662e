//! A configuration text as strings with lines: who was asked for, who was not, and what was wrong.

use std::collections::BTreeMap;
use std::ops::Range;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::{Complaint, ConfigError};

/// Longest configuration text that is read, bytes.
const TEXT_BYTES_MAX: usize = 64 * 1024;

/// Settings by key, as written, and the complaints so far.
#[derive(Debug)]
pub(super) struct Source {
    unread: BTreeMap<String, (usize, String)>,
    lines: BTreeMap<String, usize>,
    complaints: Vec<Complaint>,
}

impl Source {
    /// Reads a text into strings.
    pub(super) fn read(text: &str) -> Result<Self, ConfigError> {
        let refuse = |line: usize, message: String| {
            ConfigError(vec![Complaint {
                line,
                key: String::new(),
                message,
            }])
        };
        if text.len() > TEXT_BYTES_MAX {
            return Err(refuse(1, format!("longer than {TEXT_BYTES_MAX} bytes")));
        }
        let table = DeTable::parse(text).map_err(|error| {
            let line = error.span().map_or(1, |span| line_of(text, &span));
            refuse(line, error.message().to_owned())
        })?;
        let mut source = Self {
            unread: BTreeMap::new(),
            lines: BTreeMap::new(),
            complaints: Vec::new(),
        };
        source.collect(text, "", table.get_ref());
        Ok(source)
    }

    fn collect(&mut self, text: &str, prefix: &str, table: &DeTable<'_>) {
        for (name, value) in table {
            let key = format!("{prefix}{}", name.get_ref());
            let line = line_of(text, &name.span());
            match value.get_ref() {
                DeValue::Table(inner) if prefix.is_empty() => {
                    self.collect(text, &format!("{key}."), inner);
                }
                _ => match written(value) {
                    Some(word) => {
                        self.lines.insert(key.clone(), line);
                        self.unread.insert(key, (line, word));
                    }
                    None => self.complaints.push(Complaint {
                        line,
                        key,
                        message: "a text or a whole number is wanted here".to_owned(),
                    }),
                },
            }
        }
    }

    /// Takes the value of `key`, or `default`; a complaint is kept and yields none.
    pub(super) fn value<T>(
        &mut self,
        key: &str,
        default: &str,
        parse: impl FnOnce(&str) -> Result<T, String>,
    ) -> Option<T> {
        let word = self
            .unread
            .remove(key)
            .map_or_else(|| default.to_owned(), |(_, word)| word);
        match parse(&word) {
            Ok(value) => Some(value),
            Err(message) => {
                self.complain(key, message);
                None
            }
        }
    }

    /// Keeps a complaint about `key`.
    pub(super) fn complain(&mut self, key: &str, message: String) {
        self.complaints.push(Complaint {
            line: self.lines.get(key).copied().unwrap_or(0),
            key: key.to_owned(),
            message,
        });
    }

    /// All complaints in the order of their lines; keys that nobody asked for among them.
    pub(super) fn finish(mut self) -> Vec<Complaint> {
        for (key, (line, _)) in self.unread {
            self.complaints.push(Complaint {
                line,
                key,
                message: "no such setting".to_owned(),
            });
        }
        self.complaints.sort_by_key(|complaint| complaint.line);
        self.complaints
    }
}

fn written(value: &Spanned<DeValue<'_>>) -> Option<String> {
    match value.get_ref() {
        DeValue::String(word) => Some(word.to_string()),
        DeValue::Integer(number) => Some(number.as_str().to_owned()),
        DeValue::Float(_)
        | DeValue::Boolean(_)
        | DeValue::Datetime(_)
        | DeValue::Array(_)
        | DeValue::Table(_) => None,
    }
}

fn line_of(text: &str, span: &Range<usize>) -> usize {
    let before = text.as_bytes().get(..span.start).unwrap_or(text.as_bytes());
    before.split(|byte| *byte == b'\n').count()
}
