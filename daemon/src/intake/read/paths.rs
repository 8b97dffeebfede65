//! Paths: where the rows of a nested document are, and where a row's texts are inside it.
//!
//! Invariant: a path is taken apart once, when an export is opened; what it means does not depend on the document.
//!
//! `rows` begins with a stroke and names every step from the document's outside: in XML the root element is the first.
//! `*` is any name, or any place of an array. `/` alone is the document itself. Inside a row, `a/b` goes down, `@a` is an
//! attribute of the element reached so far, `.` is the row itself, and each leading `..` goes out to what encloses the
//! row (arrays do not count).

use super::FileFault;

/// One step of a path to rows.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Step {
    /// The child of this name; in an array, the place of this number, from 0.
    Name(String),
    /// Any child.
    Any,
}

impl Step {
    /// Whether a child of this name is meant.
    pub fn takes(&self, name: &str) -> bool {
        match self {
            Self::Name(wanted) => wanted == name,
            Self::Any => true,
        }
    }
}

/// The steps of a path to rows; none for the document itself.
pub fn steps(rows: &str) -> Vec<Step> {
    let names = rows.split('/').filter(|name| !name.is_empty());
    names.map(|name| if name == "*" { Step::Any } else { Step::Name(name.to_owned()) }).collect()
}

/// A path inside a row.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Inside {
    /// How many steps out of the row it begins.
    pub up: usize,
    /// The names downwards from there.
    pub down: Vec<String>,
    /// The attribute of what is reached.
    pub attribute: Option<String>,
}

impl Inside {
    /// Takes a column's name of the plan apart.
    pub fn parse(column: &str) -> Result<Self, FileFault> {
        let mut inside = Self { up: 0, down: vec![], attribute: None };
        for name in column.trim().split('/') {
            match name.trim() {
                _ if inside.attribute.is_some() => return Err(misnamed(column)),
                "." if inside.down.is_empty() => {}
                ".." if inside.down.is_empty() => inside.up += 1,
                "" | "." | ".." | "@" => return Err(misnamed(column)),
                name => match name.strip_prefix('@') {
                    Some(attribute) => inside.attribute = Some(attribute.to_owned()),
                    None => inside.down.push(name.to_owned()),
                },
            }
        }
        Ok(inside)
    }
}

fn misnamed(column: &str) -> FileFault {
    FileFault::Layout(format!("the plan names \"{column}\", which is no path inside a row (\"a/b\", \"@a\", \"../a\")"))
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;

    fn inside(up: usize, down: &[&str], attribute: Option<&str>) -> Inside {
        Inside {
            up,
            down: down.iter().map(|name| (*name).to_owned()).collect(),
            attribute: attribute.map(str::to_owned),
        }
    }

    #[test]
    fn paths_are_taken_apart() {
        assert_eq!(steps("/"), []);
        assert_eq!(steps("/a/*/b"), [Step::Name("a".into()), Step::Any, Step::Name("b".into())]);
        assert_eq!(Inside::parse("a/b").unwrap(), inside(0, &["a", "b"], None));
        assert_eq!(Inside::parse("../../@id").unwrap(), inside(2, &[], Some("id")));
        assert_eq!(Inside::parse("@id").unwrap(), inside(0, &[], Some("id")));
        assert_eq!(Inside::parse(".").unwrap(), inside(0, &[], None));
        for wrong in ["", "a//b", "a/../b", "@a/b", "a/@"] {
            assert!(matches!(Inside::parse(wrong), Err(FileFault::Layout(_))), "{wrong}");
        }
    }
}
