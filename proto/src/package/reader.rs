//! A collecting reader of TOML: it walks a parsed document, and notes every fault with key path and line instead of
//! stopping at the first.
//!
//! A method that returns `None` has noted why, or the key was optional and is not there.

use nalgebra::{Matrix3, Vector3};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::violation::{Violation, Violations};
use crate::limits::{self, Limit};

/// A value with its place.
pub(super) struct Node<'d, 'i> {
    pub(super) path: String,
    value: &'d Spanned<DeValue<'i>>,
}

/// A table with its place.
pub(super) struct Section<'d, 'i> {
    pub(super) path: String,
    table: &'d DeTable<'i>,
}

/// Collects what is wrong.
pub(super) struct Reader {
    file: &'static str,
    line_starts: Vec<usize>,
    pub(super) violations: Violations,
}

impl<'d, 'i> Section<'d, 'i> {
    /// The table, whose keys must be among `known`.
    pub(super) fn open(
        reader: &mut Reader,
        path: &str,
        table: &'d DeTable<'i>,
        known: &[&str],
    ) -> Self {
        let section = Self {
            path: path.to_owned(),
            table,
        };
        for key in table.keys() {
            let name: &str = key.get_ref();
            if !known.contains(&name) {
                let message = if reader.violations.is_full() {
                    String::new()
                } else {
                    match nearest(name, known) {
                        Some(near) => format!("unknown key; did you mean \"{near}\"?"),
                        None => "unknown key".to_owned(),
                    }
                };
                let line = reader.line_of(key.span().start);
                reader.note(&section.path_of(&shortened(name)), Some(line), message);
            }
        }
        section
    }

    fn path_of(&self, key: &str) -> String {
        if self.path.is_empty() {
            key.to_owned()
        } else {
            format!("{}.{key}", self.path)
        }
    }

    pub(super) fn has(&self, key: &str) -> bool {
        self.table.contains_key(key)
    }

    /// A key that may be absent.
    pub(super) fn optional(&self, key: &str) -> Option<Node<'d, 'i>> {
        self.table.get(key).map(|value| Node {
            path: self.path_of(key),
            value,
        })
    }

    /// A key that must be there.
    pub(super) fn required(&self, reader: &mut Reader, key: &str) -> Option<Node<'d, 'i>> {
        let node = self.optional(key);
        if node.is_none() {
            reader.note(&self.path_of(key), None, "the key is missing");
        }
        node
    }
}

impl Reader {
    pub(super) fn new(file: &'static str, text: &str) -> Self {
        let line_starts = text.match_indices('\n').map(|(at, _)| at + 1).collect();
        Self {
            file,
            line_starts,
            violations: Violations::default(),
        }
    }

    /// Line, from 1, of a byte offset.
    pub(super) fn line_of(&self, offset: usize) -> usize {
        self.line_starts.partition_point(|start| *start <= offset) + 1
    }

    pub(super) fn note(&mut self, key: &str, line: Option<usize>, message: impl Into<String>) {
        self.violations.push(Violation {
            file: self.file.to_owned(),
            key: key.to_owned(),
            line,
            message: message.into(),
        });
    }

    /// Notes a fault of a value.
    pub(super) fn fault(&mut self, node: &Node<'_, '_>, message: impl Into<String>) {
        let line = self.line_of(node.value.span().start);
        self.note(&node.path, Some(line), message);
    }

    fn wanted<T>(&mut self, node: &Node<'_, '_>, wanted: &str) -> Option<T> {
        let found = node.value.get_ref().type_str();
        self.fault(
            node,
            format!("{wanted} is wanted, not a value of type {found}"),
        );
        None
    }

    /// A table, whose keys must be among `known`.
    pub(super) fn table<'d, 'i>(
        &mut self,
        node: &Node<'d, 'i>,
        known: &[&str],
    ) -> Option<Section<'d, 'i>> {
        match node.value.get_ref() {
            DeValue::Table(table) => Some(Section::open(self, &node.path, table, known)),
            _ => self.wanted(node, "a table"),
        }
    }

    /// The entries of a list, not more than `limit`.
    pub(super) fn list<'d, 'i>(
        &mut self,
        node: &Node<'d, 'i>,
        limit: Limit,
    ) -> Option<Vec<Node<'d, 'i>>> {
        let DeValue::Array(entries) = node.value.get_ref() else {
            return self.wanted(node, "a list");
        };
        if let Err(exceeded) = limit.check_len(entries.len()) {
            self.fault(node, exceeded.to_string());
            return None;
        }
        let entry = |(k, value)| Node {
            path: format!("{}[{k}]", node.path),
            value,
        };
        Some(entries.iter().enumerate().map(entry).collect())
    }

    /// The entries of a list, each read by `read`; `None` if one could not be read.
    pub(super) fn list_of<'d, 'i, T>(
        &mut self,
        node: &Node<'d, 'i>,
        limit: Limit,
        mut read: impl FnMut(&mut Self, &Node<'d, 'i>) -> Option<T>,
    ) -> Option<Vec<T>> {
        let entries = self.list(node, limit)?;
        let read: Vec<Option<T>> = entries.iter().map(|entry| read(self, entry)).collect();
        read.into_iter().collect()
    }

    /// A list of exactly N entries, each read by `read`.
    pub(super) fn exactly<'d, 'i, T, const N: usize>(
        &mut self,
        node: &Node<'d, 'i>,
        mut read: impl FnMut(&mut Self, &Node<'d, 'i>) -> Option<T>,
    ) -> Option<[T; N]> {
        let DeValue::Array(entries) = node.value.get_ref() else {
            return self.wanted(node, &format!("a list of {N}"));
        };
        if entries.len() != N {
            self.fault(
                node,
                format!("{} entries; exactly {N} are wanted", entries.len()),
            );
            return None;
        }
        let values = self.list_of(node, limits::LINE_BYTES, &mut read)?;
        values.try_into().ok()
    }

    pub(super) fn boolean(&mut self, node: &Node<'_, '_>) -> Option<bool> {
        match node.value.get_ref() {
            DeValue::Boolean(value) => Some(*value),
            _ => self.wanted(node, "true or false"),
        }
    }

    /// One line of text, not longer than `limit`, without control characters; may be empty.
    pub(super) fn line(&mut self, node: &Node<'_, '_>, limit: Limit) -> Option<String> {
        self.text(node, limit, char::is_control)
    }

    /// Text of several lines, not longer than `limit`; may be empty.
    pub(super) fn lines(&mut self, node: &Node<'_, '_>, limit: Limit) -> Option<String> {
        self.text(node, limit, |c| c.is_control() && c != '\n' && c != '\t')
    }

    /// A name: one line, neither empty nor with blanks at its ends.
    pub(super) fn name(&mut self, node: &Node<'_, '_>) -> Option<String> {
        let name = self.line(node, limits::NAME_BYTES)?;
        if name.is_empty() {
            self.fault(node, "must not be empty");
            return None;
        }
        if name.trim() != name {
            self.fault(node, "must not begin or end with a blank");
            return None;
        }
        Some(name)
    }

    fn text(
        &mut self,
        node: &Node<'_, '_>,
        limit: Limit,
        forbidden: impl Fn(char) -> bool,
    ) -> Option<String> {
        let DeValue::String(text) = node.value.get_ref() else {
            return self.wanted(node, "a string");
        };
        if let Err(exceeded) = limit.check_len(text.len()) {
            self.fault(node, exceeded.to_string());
            return None;
        }
        if let Some((at, c)) = text.char_indices().find(|(_, c)| forbidden(*c)) {
            let code = u32::from(c);
            self.fault(node, format!("control character U+{code:04X} at byte {at}"));
            return None;
        }
        Some(text.clone().into_owned())
    }

    /// One of the named values.
    pub(super) fn choice<T: Copy>(
        &mut self,
        node: &Node<'_, '_>,
        choices: &[(&str, T)],
    ) -> Option<T> {
        let DeValue::String(text) = node.value.get_ref() else {
            return self.wanted(node, "a string");
        };
        let found = choices.iter().find(|(name, _)| name == text);
        if found.is_none() {
            let names: Vec<&str> = choices.iter().map(|(name, _)| *name).collect();
            let near = nearest(text, &names)
                .map(|near| format!("; did you mean \"{near}\"?"))
                .unwrap_or_default();
            let known = names.join("\", \"");
            let text = shortened(text);
            self.fault(node, format!("\"{text}\" is not one of \"{known}\"{near}"));
        }
        found.map(|(_, value)| *value)
    }

    /// An integer from `min` to `max`.
    pub(super) fn integer(&mut self, node: &Node<'_, '_>, min: i64, max: i64) -> Option<i64> {
        let DeValue::Integer(integer) = node.value.get_ref() else {
            return self.wanted(node, "an integer");
        };
        let value = i64::from_str_radix(integer.as_str(), integer.radix()).ok();
        let value = value.filter(|value| (min..=max).contains(value));
        if value.is_none() {
            let text = shortened(integer.as_str());
            self.fault(node, format!("{text} is not between {min} and {max}"));
        }
        value
    }

    /// A finite number from `min` to `max`; an integer is taken too.
    pub(super) fn number(&mut self, node: &Node<'_, '_>, min: f64, max: f64) -> Option<f64> {
        let value: Option<f64> = match node.value.get_ref() {
            DeValue::Float(float) => float.as_str().parse().ok(),
            DeValue::Integer(integer) if integer.radix() == 10 => integer.as_str().parse().ok(),
            _ => return self.wanted(node, "a number"),
        };
        match value {
            Some(value) if !value.is_finite() => {
                self.fault(node, "the number is not finite");
                None
            }
            Some(value) if value < min || value > max => {
                self.fault(node, format!("{value} is not between {min} and {max}"));
                None
            }
            Some(value) => Some(value),
            None => {
                self.fault(node, "the number cannot be read");
                None
            }
        }
    }

    /// Three numbers.
    pub(super) fn vector(&mut self, node: &Node<'_, '_>, max: f64) -> Option<Vector3<f64>> {
        self.exactly(node, |reader, entry| reader.number(entry, -max, max))
            .map(|[x, y, z]: [f64; 3]| Vector3::new(x, y, z))
    }

    /// Three rows of three numbers.
    pub(super) fn matrix(&mut self, node: &Node<'_, '_>, max: f64) -> Option<Matrix3<f64>> {
        self.exactly(node, |reader, row| reader.vector(row, max))
            .map(|rows: [Vector3<f64>; 3]| Matrix3::from_rows(&rows.map(|row| row.transpose())))
    }

    /// Three integers between −max and max.
    pub(super) fn integers(&mut self, node: &Node<'_, '_>, max: i64) -> Option<[i64; 3]> {
        self.exactly(node, |reader, entry| reader.integer(entry, -max, max))
    }
}

/// Longest text that is repeated in a message, characters.
const REPEATED_CHARS_MAX: usize = 40;

/// The text as a message may repeat it: short, and without control characters.
pub(super) fn shortened(text: &str) -> String {
    let mut short: String = text
        .chars()
        .take(REPEATED_CHARS_MAX)
        .map(|c| if c.is_control() { '\u{FFFD}' } else { c })
        .collect();
    if text.chars().nth(REPEATED_CHARS_MAX).is_some() {
        short.push('…');
    }
    short
}

/// The known name that is nearest to `name`, if it is near enough to be a slip: at most a third of its letters differ.
fn nearest<'a>(name: &str, known: &[&'a str]) -> Option<&'a str> {
    if name.chars().nth(REPEATED_CHARS_MAX).is_some() {
        return None;
    }
    let (distance, near) = known
        .iter()
        .map(|candidate| (edit_distance(name, candidate), *candidate))
        .min_by_key(|(distance, _)| *distance)?;
    (distance <= near.chars().count().div_ceil(3)).then_some(near)
}

/// Least number of insertions, deletions, replacements and exchanges of neighbouring characters, no piece changed twice
/// (Damerau, Communications of the ACM 7, 171 (1964)). Upper and lower case count as the same.
fn edit_distance(a: &str, b: &str) -> usize {
    let [a, b] = [a, b].map(|text| text.to_lowercase().chars().collect::<Vec<char>>());
    // before[j] and row[j] belong to the first i − 1 and i characters of a, and the first j of b.
    let mut before: Vec<usize> = Vec::new();
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, ca) in a.iter().enumerate() {
        let mut next = vec![i + 1];
        for (j, cb) in b.iter().enumerate() {
            let at = |row: &[usize], j: usize| row.get(j).copied().unwrap_or(usize::MAX - 1);
            let mut least = at(&row, j) + usize::from(ca != cb);
            least = least.min(at(&row, j + 1) + 1).min(at(&next, j) + 1);
            let exchanged = i > 0 && j > 0 && a.get(i - 1) == Some(cb) && b.get(j - 1) == Some(ca);
            if exchanged {
                least = least.min(at(&before, j - 1) + 1);
            }
            next.push(least);
        }
        before = std::mem::replace(&mut row, next);
    }
    row.last().copied().unwrap_or_default()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn edit_distances() {
        // Counted by hand.
        for (a, b, distance) in [
            ("", "abc", 3),
            ("abc", "abc", 0),
            ("abc", "acb", 1),
            ("abcd", "cdab", 4),
            ("mass", "masses", 2),
        ] {
            assert_eq!(edit_distance(a, b), distance, "{a} {b}");
            assert_eq!(edit_distance(b, a), distance, "{b} {a}");
        }
    }
}
