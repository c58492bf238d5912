//! Which known names come nearest to a mistyped one.

/// Up to `count` of the known names, nearest first; none that differs in more than half its letters.
///
/// Counts single-letter insertions, deletions and replacements (Levenshtein's distance); upper and
/// lower case, blanks, hyphens and underscores count as equal.
#[must_use]
pub fn nearest<'k>(name: &str, known: impl IntoIterator<Item = &'k str>, count: usize) -> Vec<&'k str> {
    let wanted = letters(name);
    let mut found: Vec<(usize, &str)> = known
        .into_iter()
        .filter_map(|candidate| {
            let letters = letters(candidate);
            let contained = wanted.len() >= 3 && contains(&letters, &wanted);
            let steps = if contained { 1 } else { distance(&wanted, &letters) };
            let limit = letters.len().max(wanted.len()).div_ceil(2);
            (steps <= limit.saturating_sub(1).max(1)).then_some((steps, candidate))
        })
        .collect();
    found.sort_by_key(|&(steps, _)| steps);
    found.into_iter().take(count).map(|(_, candidate)| candidate).collect()
}

/// At most 64 of them: nobody means a longer name, and the work stays small for hostile input.
fn letters(name: &str) -> Vec<char> {
    name.chars()
        .filter(|c| !matches!(c, ' ' | '-' | '_' | ','))
        .take(64)
        .flat_map(char::to_lowercase)
        .collect()
}

fn contains(whole: &[char], part: &[char]) -> bool {
    whole.windows(part.len()).any(|window| window == part)
}

fn distance(a: &[char], b: &[char]) -> usize {
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, &left) in a.iter().enumerate() {
        let mut diagonal = row[0];
        row[0] = i + 1;
        for (j, &right) in b.iter().enumerate() {
            let replaced = diagonal + usize::from(left != right);
            diagonal = row[j + 1];
            row[j + 1] = replaced.min(diagonal + 1).min(row[j] + 1);
        }
    }
    row[b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn finds_the_intended_word() {
        let known = ["thickness_mm", "velocity_m_s", "density_kg_m3", "material"];
        assert_eq!(nearest("thicknes_mm", known, 1), ["thickness_mm"]);
        assert_eq!(nearest("Velocity-m/s", known, 1), ["velocity_m_s"]);
        assert_eq!(nearest("thickness", known, 1), ["thickness_mm"]);
        assert!(nearest("colour", known, 1).is_empty());
        assert!(nearest(&"x".repeat(10_000), known, 1).is_empty());
    }

    #[test]
    fn counts_single_letter_steps() {
        let steps = |a: &str, b: &str| distance(&letters(a), &letters(b));
        assert_eq!(steps("kitten", "sitting"), 3);
        assert_eq!(steps("", "abc"), 3);
        assert_eq!(steps("same", "same"), 0);
    }
}
