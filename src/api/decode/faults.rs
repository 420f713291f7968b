//! Faults and their places.

use std::fmt::Write as _;

/// Most faults one answer lists.
const MOST_FAULTS: usize = 100;
/// Most characters of a name that a place shows; longer ones are told by their beginning.
const MOST_NAME_CHARS: usize = 200;

/// Where a value stands: a path from the root, built without allocation until a fault needs it.
#[derive(Debug, Clone, Copy)]
pub struct At<'p> {
    above: Option<&'p At<'p>>,
    step: Step<'p>,
}

#[derive(Debug, Clone, Copy)]
enum Step<'p> {
    Root,
    Field(&'p str),
    Item(usize),
}

impl<'p> At<'p> {
    /// The whole document.
    pub const ROOT: At<'static> = At { above: None, step: Step::Root };

    /// A field of the object that stands here.
    pub fn field<'q>(&'q self, name: &'q str) -> At<'q>
    where
        'p: 'q,
    {
        At { above: Some(self), step: Step::Field(name) }
    }

    /// An item of the array that stands here.
    pub fn item<'q>(&'q self, index: usize) -> At<'q>
    where
        'p: 'q,
    {
        At { above: Some(self), step: Step::Item(index) }
    }

    /// Whether it is an item of an array.
    pub fn is_item(&self) -> bool {
        matches!(self.step, Step::Item(_))
    }

    /// What stands here, in words.
    pub fn subject(&self) -> String {
        match (self.step, self.above) {
            (Step::Field(name), _) => name.to_owned(),
            (Step::Item(_), Some(above)) => match above.nearest_field() {
                Some(name) => format!("a number in {name}"),
                None => "a number".to_owned(),
            },
            _ => "a number".to_owned(),
        }
    }

    fn nearest_field(&self) -> Option<&str> {
        match self.step {
            Step::Field(name) => Some(name),
            _ => self.above?.nearest_field(),
        }
    }

    /// The place as an RFC 6901 pointer.
    pub fn pointer(&self) -> String {
        let mut text = self.above.map(At::pointer).unwrap_or_default();
        match self.step {
            Step::Root => {}
            Step::Field(name) => {
                let shown =
                    name.char_indices().nth(MOST_NAME_CHARS).map_or(name, |(end, _)| name.get(..end).unwrap_or(name));
                text.push('/');
                text.push_str(&shown.replace('~', "~0").replace('/', "~1"));
                if shown.len() < name.len() {
                    text.push('…');
                }
            }
            Step::Item(index) => {
                // Writing to a String cannot fail.
                let _ = write!(text, "/{index}");
            }
        }
        text
    }
}

/// Where in a request a fault is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Place {
    /// In the body, at an RFC 6901 pointer.
    Body(String),
    /// In a line of the body, when that is no JSON; the first is 1.
    Line(u64),
    /// In a parameter of the query or the path.
    Query(String),
    /// In a header.
    Header(&'static str),
}

/// One thing wrong with a request.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Fault {
    /// Where.
    pub place: Place,
    /// What is wrong and what to do.
    pub detail: String,
}

/// Everything wrong with a request, up to a hundred faults.
#[derive(Debug, Default)]
pub struct Faults {
    list: Vec<Fault>,
    unlisted: usize,
}

impl Faults {
    /// Notes a fault in the body.
    pub fn add(&mut self, at: &At<'_>, detail: impl Into<String>) {
        if self.is_full() {
            self.unlisted += 1;
        } else {
            self.push(Fault { place: Place::Body(at.pointer()), detail: detail.into() });
        }
    }

    /// Notes a fault in a line of a body that is no JSON.
    pub fn add_line(&mut self, line: u64, detail: impl Into<String>) {
        if self.is_full() {
            self.unlisted += 1;
        } else {
            self.push(Fault { place: Place::Line(line), detail: detail.into() });
        }
    }

    /// Notes a fault anywhere.
    pub fn push(&mut self, fault: Fault) {
        if self.is_full() {
            self.unlisted += 1;
        } else {
            self.list.push(fault);
        }
    }

    /// Whether further faults are only counted.
    pub fn is_full(&self) -> bool {
        self.list.len() >= MOST_FAULTS
    }

    /// Whether there is none.
    pub fn is_empty(&self) -> bool {
        self.list.is_empty()
    }

    /// How many there are.
    pub fn count(&self) -> usize {
        self.list.len() + self.unlisted
    }

    /// The faults listed, and how many more there are.
    pub fn into_parts(self) -> (Vec<Fault>, usize) {
        (self.list, self.unlisted)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pointers_escape_as_rfc_6901_says() {
        let root = At::ROOT;
        let (a, b);
        a = root.field("a/b~c");
        b = a.item(3);
        assert_eq!(b.pointer(), "/a~1b~0c/3");
        assert_eq!(root.pointer(), "");
    }

    #[test]
    fn faults_beyond_a_hundred_are_counted() {
        let mut faults = Faults::default();
        for i in 0..150 {
            faults.add(&At::ROOT.item(i), "wrong");
        }
        let (list, unlisted) = faults.into_parts();
        assert_eq!((list.len(), unlisted), (100, 50));
    }
}
