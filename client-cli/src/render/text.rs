//! Words on a screen: widths, wrapping, and the few styles that this program uses.
//!
//! Text that came from a package or from the service passes [`clean`] before it is shown: no control character reaches
//! a terminal.

use std::borrow::Cow;

use unicode_width::UnicodeWidthChar as _;

/// How wide the screen is, and whether it shows colour.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct View {
    /// Columns.
    pub width: usize,
    /// Whether escape sequences are wanted.
    pub colour: bool,
}

/// Narrowest layout; a screen that says it is narrower gets this one.
pub const WIDTH_MIN: usize = 40;
/// Widest layout: longer lines are hard to read.
pub const WIDTH_MAX: usize = 120;
/// Width where nothing is known, as in a pipe.
pub const WIDTH_DEFAULT: usize = 80;

impl View {
    /// A view without colour.
    pub fn plain(width: usize) -> Self {
        Self {
            width: width.clamp(WIDTH_MIN, WIDTH_MAX),
            colour: false,
        }
    }

    /// `text` in a style, where the view has colour.
    pub fn paint(self, style: Style, text: &str) -> String {
        if self.colour && !text.is_empty() {
            format!("\u{1b}[{}m{text}\u{1b}[0m", style.sequence())
        } else {
            text.to_owned()
        }
    }
}

/// The styles. Every style stands beside a word that says the same, so that colour is never needed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Style {
    /// Titles.
    Strong,
    /// Side remarks.
    Quiet,
    /// All is well.
    Good,
    /// Needs care.
    Care,
    /// Not usable.
    Bad,
}

impl Style {
    fn sequence(self) -> &'static str {
        match self {
            Self::Strong => "1",
            Self::Quiet => "2",
            Self::Good => "1;36",
            Self::Care => "1;35",
            Self::Bad => "1;7",
        }
    }
}

/// `text` without control characters: line breaks and tabs become blanks, the rest the replacement character.
pub fn clean(text: &str) -> Cow<'_, str> {
    if text.chars().any(is_unsafe) {
        Cow::Owned(
            text.chars()
                .map(|c| match c {
                    '\n' | '\r' | '\t' => ' ',
                    c if is_unsafe(c) => '\u{fffd}',
                    c => c,
                })
                .collect(),
        )
    } else {
        Cow::Borrowed(text)
    }
}

/// Control characters, and those that turn the direction of writing.
fn is_unsafe(c: char) -> bool {
    c.is_control() || matches!(c, '\u{202a}'..='\u{202e}' | '\u{2066}'..='\u{2069}')
}

/// Columns that `text` takes; escape sequences of [`View::paint`] take none.
pub fn visible_width(text: &str) -> usize {
    let mut width = 0;
    let mut characters = text.chars();
    while let Some(c) = characters.next() {
        if c == '\u{1b}' {
            for inside in characters.by_ref() {
                if inside == 'm' {
                    break;
                }
            }
        } else {
            width += c.width().unwrap_or(0);
        }
    }
    width
}

/// `text` with blanks behind it up to `width` columns.
pub fn pad_right(text: &str, width: usize) -> String {
    let blanks = width.saturating_sub(visible_width(text));
    format!("{text}{}", " ".repeat(blanks))
}

/// `text` with blanks before it up to `width` columns.
pub fn pad_left(text: &str, width: usize) -> String {
    let blanks = width.saturating_sub(visible_width(text));
    format!("{}{text}", " ".repeat(blanks))
}

/// Breaks `text` into lines of at most `width` columns, at blanks where possible.
///
/// The first line starts with `first`, the others with `rest`; both count.
pub fn wrap(text: &str, width: usize, first: &str, rest: &str) -> Vec<String> {
    let mut lines = Vec::new();
    let mut line = first.to_owned();
    let mut is_fresh = true;
    for word in text.split_whitespace() {
        let room = width.saturating_sub(visible_width(rest)).max(8);
        for piece in pieces(word, room) {
            let gap = usize::from(!is_fresh);
            if !is_fresh && visible_width(&line) + gap + visible_width(&piece) > width {
                lines.push(std::mem::replace(&mut line, rest.to_owned()));
                is_fresh = true;
            }
            if !is_fresh {
                line.push(' ');
            }
            line.push_str(&piece);
            is_fresh = false;
        }
    }
    if !is_fresh || lines.is_empty() {
        lines.push(line);
    }
    lines
}

/// A word cut into pieces of at most `room` columns, after a `/` where there is one, as in paths and resource names;
/// words that hold escape sequences stay whole.
fn pieces(word: &str, room: usize) -> Vec<String> {
    if visible_width(word) <= room || word.contains('\u{1b}') {
        return vec![word.to_owned()];
    }
    let mut all = Vec::new();
    let mut piece = String::new();
    for c in word.chars() {
        if visible_width(&piece) + c.width().unwrap_or(0) > room {
            let after_slash = piece.rfind('/').map_or(piece.len(), |place| place + 1);
            let rest = piece.split_off(after_slash);
            all.push(std::mem::replace(&mut piece, rest));
        }
        piece.push(c);
    }
    all.push(piece);
    all
}

/// A page under construction.
#[derive(Debug)]
pub struct Page {
    view: View,
    text: String,
}

impl Page {
    /// An empty page.
    pub fn new(view: View) -> Self {
        Self {
            view,
            text: String::new(),
        }
    }

    /// What it is written for.
    pub fn view(&self) -> View {
        self.view
    }

    /// A line as it is.
    pub fn line(&mut self, text: &str) {
        self.text.push_str(text.trim_end());
        self.text.push('\n');
    }

    /// An empty line, unless the page is empty or ends with one.
    pub fn gap(&mut self) {
        if !self.text.is_empty() && !self.text.ends_with("\n\n") {
            self.text.push('\n');
        }
    }

    /// A title above what follows.
    pub fn title(&mut self, text: &str) {
        self.gap();
        for line in wrap(text, self.view.width, "", "") {
            let painted = self.view.paint(Style::Strong, &line);
            self.line(&painted);
        }
    }

    /// A wrapped paragraph.
    pub fn paragraph(&mut self, indent: usize, text: &str) {
        let blanks = " ".repeat(indent);
        self.hanging(&blanks, &blanks, text);
    }

    /// A wrapped paragraph whose first line starts differently.
    pub fn hanging(&mut self, first: &str, rest: &str, text: &str) {
        for line in wrap(text, self.view.width, first, rest) {
            self.line(&line);
        }
    }

    /// A label with wrapped text beside it; below it where a word would have to be cut beside it and not there.
    pub fn labelled(&mut self, indent: usize, label: &str, label_width: usize, text: &str) {
        let label = self.view.paint(Style::Quiet, label);
        let longest = text.split_whitespace().map(visible_width).max();
        let longest = longest.unwrap_or_default();
        if longest > self.view.width.saturating_sub(indent + label_width + 1)
            && longest <= self.view.width.saturating_sub(indent + 2)
        {
            self.line(&format!("{}{label}", " ".repeat(indent)));
            self.paragraph(indent + 2, text);
            return;
        }
        let first = format!("{}{} ", " ".repeat(indent), pad_right(&label, label_width));
        let rest = " ".repeat(indent + label_width + 1);
        self.hanging(&first, &rest, text);
    }

    /// The page.
    pub fn finish(self) -> String {
        self.text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_id_stays_in_one_piece_where_it_can() {
        let id = "5dc91dcf617f4cf8997a840489d97365";
        let mut page = Page::new(View::plain(40));
        page.labelled(0, "submission", 10, id);
        page.paragraph(0, &format!("submissions/{id}"));
        let text = page.finish();
        let expected = format!("submission\n  {id}\nsubmissions/\n{id}\n");
        assert_eq!(text, expected);
        assert_eq!(
            pieces("/packages/of/form-ii", 13),
            ["/packages/of/", "form-ii"]
        );
        assert_eq!(pieces("a/bbbbbbbb", 4), ["a/", "bbbb", "bbbb"]);
    }

    #[test]
    fn wrapping_keeps_every_word_and_the_width() {
        let text = "one two three four five six seven eight nine ten eleven twelve";
        for width in [12, 20, 60] {
            let lines = wrap(text, width, "- ", "  ");
            assert!(lines.iter().all(|line| visible_width(line) <= width));
            let words: Vec<&str> = lines.iter().flat_map(|l| l.split_whitespace()).collect();
            assert_eq!(words[1..].join(" "), text);
        }
    }

    #[test]
    fn a_word_wider_than_the_line_is_cut_and_nothing_is_lost() {
        let digest = "0123456789abcdef".repeat(4);
        let lines = wrap(&digest, 20, "", "  ");
        assert!(lines.iter().all(|line| visible_width(line) <= 20));
        assert_eq!(lines.concat().replace(' ', ""), digest);
    }

    #[test]
    fn no_control_character_reaches_the_screen() {
        assert_eq!(clean("a\u{1b}[31mb\nc\u{7}"), "a\u{fffd}[31mb c\u{fffd}");
        assert_eq!(clean("form II, 12.3i cm⁻¹"), "form II, 12.3i cm⁻¹");
        assert_eq!(clean("abc\u{202e}"), "abc\u{fffd}");
    }

    #[test]
    fn colour_takes_no_room_and_is_absent_from_a_plain_view() {
        let colourful = View {
            width: 80,
            colour: true,
        };
        let painted = colourful.paint(Style::Bad, "fail");
        assert!(painted.starts_with('\u{1b}'));
        assert_eq!(visible_width(&painted), 4);
        assert_eq!(View::plain(80).paint(Style::Bad, "fail"), "fail");
    }

    #[test]
    fn wide_characters_count_twice() {
        assert_eq!(visible_width("晶体"), 4);
        assert_eq!(pad_right("晶", 4), "晶  ");
    }
}
