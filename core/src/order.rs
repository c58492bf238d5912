//! Sorting of short lists.
//!
//! The library's sorts carry a panic for orders that contradict themselves, so an insertion sort
//! stands here: it cannot panic, keeps equal entries in their order, and is quick enough for the few
//! dozen entries that the core ever sorts.

/// Sorts by `before`: "must the first stand before the second?".
pub fn sort<T: Copy>(items: &mut [T], before: impl Fn(&T, &T) -> bool) {
    for end in 1..items.len() {
        sink_last(items.get_mut(..=end).unwrap_or(&mut []), &before);
    }
}

/// Moves the last entry of an otherwise sorted list to its place.
pub fn sink_last<T: Copy>(items: &mut [T], before: impl Fn(&T, &T) -> bool) {
    for i in (1..items.len()).rev() {
        match items.get_mut(i - 1..=i) {
            Some([earlier, later]) if before(later, earlier) => core::mem::swap(earlier, later),
            _ => return,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn agrees_with_the_stable_sort_of_the_library(mut items in proptest::collection::vec((0u8..10, any::<u8>()), 0..70)) {
            let mut expected = items.clone();
            expected.sort_by_key(|item| item.0);
            sort(&mut items, |a, b| a.0 < b.0);
            prop_assert_eq!(items, expected);
        }
    }
}
