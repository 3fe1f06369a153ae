//! "Did you mean": the closest of some names.

/// Work that one reading may spend on suggestions, in cells of edit-distance
/// tables: a file of nothing but misspelt names must not take minutes.
const BUDGET: usize = 20_000_000;

/// What looking at one name costs, whatever its length.
const NAME_COST: usize = 20;

/// Longest word that is compared, in bytes.
const MAX_LENGTH: usize = 512;

/// Finds the closest name, within a budget.
pub(super) struct Suggester {
    spent: usize,
}

impl Suggester {
    pub fn new() -> Self {
        Suggester { spent: 0 }
    }

    /// The name closest to `word`, if it is close enough to be meant: an edit
    /// distance of at most a third of the longer one, or a difference in case,
    /// hyphens and underscores only.
    pub fn closest<'n>(
        &mut self,
        word: &str,
        names: impl IntoIterator<Item = &'n str>,
    ) -> Option<&'n str> {
        self.close(word, names).first().copied()
    }

    /// Every name close enough to be meant, the closest first; among equals
    /// those that only go on, or stop short.
    pub fn close<'n>(
        &mut self,
        word: &str,
        names: impl IntoIterator<Item = &'n str>,
    ) -> Vec<&'n str> {
        let mut found: Vec<(usize, bool, &'n str)> = Vec::new();
        if word.len() > MAX_LENGTH {
            return Vec::new();
        }
        let word_folded = fold(word);
        for name in names {
            if self.spent > BUDGET {
                return Vec::new();
            }
            self.spent += NAME_COST;
            if name.len() > MAX_LENGTH {
                continue;
            }
            let folded = fold(name);
            let limit = word_folded.len().max(folded.len()) / 3;
            if word_folded.len().abs_diff(folded.len()) > limit {
                continue;
            }
            self.spent += word_folded.len() * folded.len();
            let distance = edit_distance(&word_folded, &folded);
            if distance <= limit {
                let goes_on = name.starts_with(word) || word.starts_with(name);
                found.push((distance, !goes_on, name));
            }
        }
        found.sort_by_key(|(distance, differs, _)| (*distance, *differs));
        found.into_iter().map(|(_, _, name)| name).collect()
    }
}

fn fold(word: &str) -> Vec<char> {
    let kept = word.chars().filter(|c| !matches!(c, '-' | '_' | ' '));
    kept.flat_map(char::to_lowercase).collect()
}

/// Least number of insertions, deletions, replacements and swaps of neighbours
/// (each letter moved once) between two words.
fn edit_distance(a: &[char], b: &[char]) -> usize {
    let mut before: Vec<usize> = Vec::new();
    let mut above: Vec<usize> = (0..=b.len()).collect();
    for (i, &x) in a.iter().enumerate() {
        let mut row = vec![i + 1];
        for (j, &y) in b.iter().enumerate() {
            let replaced = above[j] + usize::from(x != y);
            let mut least = replaced.min(above[j + 1] + 1).min(row[j] + 1);
            if i > 0 && j > 0 && x == b[j - 1] && a[i - 1] == y {
                least = least.min(before[j - 1] + 1);
            }
            row.push(least);
        }
        before = std::mem::replace(&mut above, row);
    }
    above[b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn distances() {
        let d = |a: &str, b: &str| {
            let (a, b): (Vec<char>, Vec<char>) = (a.chars().collect(), b.chars().collect());
            edit_distance(&a, &b)
        };
        assert_eq!(d("", "abc"), 3);
        assert_eq!(d("kitten", "sitting"), 3);
        assert_eq!(d("turbine", "trubine"), 1);
        assert_eq!(d("same", "same"), 0);
    }

    #[test]
    fn close_names_only() {
        let mut s = Suggester::new();
        let kinds = ["turbine", "valve", "pump", "closed-heater"];
        assert_eq!(s.closest("turbin", kinds), Some("turbine"));
        assert_eq!(s.closest("ClosedHeater", kinds), Some("closed-heater"));
        assert_eq!(s.closest("boiler", kinds), None);
        let names = ["turbine-hp", "turbine-lpx"];
        assert_eq!(s.close("turbine-lp", names), ["turbine-lpx", "turbine-hp"]);
        assert_eq!(s.closest("", kinds), None);
    }
}
