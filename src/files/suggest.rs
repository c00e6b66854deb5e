//! The known word closest to a misspelt one.

/// The candidate within a third of the word's length (at least one letter) in edits, if any; an exchange of two
/// neighbouring letters is one edit (optimal string alignment distance).
pub fn closest<'c>(word: &str, candidates: impl IntoIterator<Item = &'c str>) -> Option<&'c str> {
    let word: Vec<char> = plain(word);
    let within = (word.len() / 3).max(1);
    candidates
        .into_iter()
        .map(|candidate| (distance(&word, &plain(candidate)), candidate))
        .filter(|(distance, _)| *distance <= within)
        .min_by_key(|(distance, _)| *distance)
        .map(|(_, candidate)| candidate)
}

/// Case and the choice of separator are no difference worth counting.
fn plain(word: &str) -> Vec<char> {
    word.chars().take(64).map(|c| if matches!(c, '-' | ' ') { '_' } else { c.to_ascii_lowercase() }).collect()
}

fn distance(a: &[char], b: &[char]) -> usize {
    let mut before_last = vec![0; b.len() + 1];
    let mut last: Vec<usize> = (0..=b.len()).collect();
    for i in 1..=a.len() {
        let mut row = vec![i];
        for j in 1..=b.len() {
            let replaced = last[j - 1] + usize::from(a[i - 1] != b[j - 1]);
            let mut edits = replaced.min(last[j] + 1).min(row[j - 1] + 1);
            if i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1] {
                edits = edits.min(before_last[j - 2] + 1);
            }
            row.push(edits);
        }
        before_last = std::mem::replace(&mut last, row);
    }
    last[b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Damerau's own examples of single errors: one letter wrong, missing, extra, or two exchanged (Communications of the
    /// ACM 7(3), 1964) [M].
    #[test]
    fn one_slip_of_the_pen_is_one_edit() {
        for slip in ["capacitnce", "capacitancee", "capacitanse", "capcaitance"] {
            assert_eq!(distance(&plain("capacitance"), &plain(slip)), 1, "{slip}");
        }
    }

    #[test]
    fn a_word_unlike_any_other_suggests_nothing() {
        assert_eq!(closest("colour", ["capacitance", "rating"]), None);
        assert_eq!(closest("Line-Range", ["line_range", "name"]), Some("line_range"));
    }
}
