//! The known word nearest to a misspelt one.

/// The word of `known` that `word` most likely stands for, or `None` when none is near: at most a third of its
/// letters may differ, a swap of neighbours counted as one difference.
pub(super) fn nearest<'k>(word: &str, known: impl Iterator<Item = &'k str>) -> Option<&'k str> {
    if word.len() > LONGEST {
        return None;
    }
    let word = word.to_ascii_lowercase();
    known
        .map(|candidate| (strsim::osa_distance(&word, &candidate.to_ascii_lowercase()), candidate))
        .filter(|(apart, candidate)| {
            *apart <= 1.max(candidate.len().min(word.len()) / 3) && *apart < word.len()
        })
        .min_by_key(|(apart, _)| *apart)
        .map(|(_, candidate)| candidate)
}

/// Longer words, in bytes, aren't compared; no key comes near it.
const LONGEST: usize = 48;

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_near_word_is_offered_and_a_far_one_is_not() {
        let known = ["gain", "offset_v", "accuracy_pct"];
        assert_eq!(nearest("gian", known.into_iter()), Some("gain"));
        assert_eq!(nearest("Accuracy_pc", known.into_iter()), Some("accuracy_pct"));
        assert_eq!(nearest("x", ["y"].into_iter()), None);
        assert_eq!(nearest("colour", known.into_iter()), None);
        assert_eq!(nearest(&"gain".repeat(1_000), known.into_iter()), None);
    }
}
