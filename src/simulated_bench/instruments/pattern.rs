//! Header patterns in the notation of command references, `CHANnel#:SCALe` or `SYSTem:ERRor[:NEXT]`, and keywords with a
//! short and a long form. `#` takes a numeric suffix that is 1 when left out.

/// A compiled header pattern.
#[derive(Debug, Clone)]
pub struct Pattern {
    nodes: Vec<Node>,
}

#[derive(Debug, Clone)]
struct Node {
    keyword: &'static str,
    optional: bool,
    numbered: bool,
}

impl Pattern {
    /// Compiles a pattern.
    pub fn new(text: &'static str) -> Self {
        let mut nodes = vec![];
        for part in text.split(':') {
            // "ERRor[" opens the option of the next node, "NEXT]" closes its own.
            let optional = part.ends_with(']');
            let bare = part.trim_matches(['[', ']']);
            let numbered = bare.ends_with('#');
            nodes.push(Node { keyword: bare.trim_end_matches('#'), optional, numbered });
        }
        Self { nodes }
    }

    /// The numeric suffix (1 if there is none), if the header matches.
    pub fn matches(&self, header: &[String]) -> Option<u32> {
        matches(&self.nodes, header)
    }
}

fn matches(nodes: &[Node], header: &[String]) -> Option<u32> {
    let Some((node, rest)) = nodes.split_first() else {
        return header.is_empty().then_some(1);
    };
    let taken = header.split_first().and_then(|(mnemonic, following)| {
        let (name, suffix) = if node.numbered { suffixed(mnemonic)? } else { (mnemonic.as_str(), None) };
        let found = is_keyword(node.keyword, name).then(|| matches(rest, following)).flatten()?;
        Some(suffix.unwrap_or(found))
    });
    taken.or_else(|| node.optional.then(|| matches(rest, header)).flatten())
}

fn suffixed(mnemonic: &str) -> Option<(&str, Option<u32>)> {
    let name = mnemonic.trim_end_matches(|c: char| c.is_ascii_digit());
    let digits = &mnemonic[name.len()..];
    if digits.is_empty() { Some((name, None)) } else { Some((name, Some(digits.parse().ok()?))) }
}

/// Whether `given` is the short or the long form of a keyword like `NORMal`, in any case.
pub fn is_keyword(keyword: &str, given: &str) -> bool {
    given.eq_ignore_ascii_case(keyword) || given.eq_ignore_ascii_case(short_form(keyword))
}

/// The short form of a keyword: what is written in capitals.
pub fn short_form(keyword: &str) -> &str {
    keyword.trim_end_matches(|c: char| c.is_ascii_lowercase())
}
