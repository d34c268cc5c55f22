//! Isotonic regression and the blocks it pools.
//!
//! Vectors hold one or two components of equal length, one after the other. A link `i` says that
//! coordinates i and i + 1 belong to one block, on which the normal is flat; it stands for the
//! ray e_{i+1} - e_i with a positive multiplier. Blocks never reach across components.

/// Ranges of coordinates joined by links.
pub(super) fn blocks(links: &[bool]) -> impl Iterator<Item = std::ops::Range<usize>> + '_ {
    let mut start = 0;
    std::iter::from_fn(move || {
        if start >= links.len() {
            return None;
        }
        let first = start;
        let mut end = start;
        while links[end] {
            end += 1;
        }
        start = end + 1;
        Some(first..start)
    })
}

/// The nearest vector that increases within each component (pool adjacent violators), written
/// over `values`; `links` receives the blocks that were pooled.
pub(super) fn pool_adjacent_violators(values: &mut [f64], modes: usize, links: &mut [bool]) {
    let mut pools: Vec<(f64, usize)> = Vec::with_capacity(modes);
    for (values, links) in values.chunks_mut(modes).zip(links.chunks_mut(modes)) {
        pools.clear();
        for &value in values.iter() {
            let (mut sum, mut size) = (value, 1);
            while let Some(&(last_sum, last_size)) = pools.last() {
                if last_sum * size as f64 <= sum * last_size as f64 {
                    break;
                }
                sum += last_sum;
                size += last_size;
                pools.pop();
            }
            pools.push((sum, size));
        }
        let mut start = 0;
        for &(sum, size) in &pools {
            values[start..start + size].fill(sum / size as f64);
            links[start..start + size].fill(true);
            start += size;
            links[start - 1] = false;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn violators_are_pooled_within_components() {
        let mut values = [1.0, 3.0, 2.0, 0.0, 5.0, 4.0, 1.0, 2.0];
        let mut links = [false; 8];
        pool_adjacent_violators(&mut values, 4, &mut links);
        assert_eq!(
            values,
            [1.0, 5.0 / 3.0, 5.0 / 3.0, 5.0 / 3.0, 3.0, 3.0, 3.0, 3.0]
        );
        let found: Vec<_> = blocks(&links).collect();
        assert_eq!(found, [0..1, 1..4, 4..8]);
    }

    #[test]
    fn increasing_values_stay() {
        let mut values = [0.0, 0.0, 1.0];
        let mut links = [true; 3];
        pool_adjacent_violators(&mut values, 3, &mut links);
        assert_eq!(values, [0.0, 0.0, 1.0]);
        assert_eq!(blocks(&links).count(), 3);
    }
}
