//! Which readings are drawn when there are too many to be told apart.

/// Most readings that are drawn. Of a longer series, every pixel column keeps the readings that stand
/// highest and lowest in each panel, so that no outlier and no envelope is lost; readings at even steps
/// fill what is left.
pub const DOTS_MAX: usize = 5_000;

/// Returns the places of the readings to draw, in order.
///
/// # Arguments
/// `x_px` — where the readings stand across the page, in order; `panels` — their values, one list a
/// panel, each as long as `x_px`.
pub fn drawn(x_px: &[f64], panels: &[&[f64]]) -> Vec<usize> {
    if x_px.len() <= DOTS_MAX {
        return (0..x_px.len()).collect();
    }
    let mut kept = Vec::new();
    let mut begin = 0;
    for column in x_px.chunk_by(|a, b| a.floor().total_cmp(&b.floor()).is_eq()) {
        let end = begin + column.len();
        for values in panels {
            let by_value = |a: &usize, b: &usize| values[*a].total_cmp(&values[*b]);
            kept.extend((begin..end).min_by(by_value));
            kept.extend((begin..end).max_by(by_value));
        }
        begin = end;
    }
    kept.sort_unstable();
    kept.dedup();
    let left = DOTS_MAX.saturating_sub(kept.len());
    if left > 0 {
        kept.extend((0..x_px.len()).step_by(x_px.len().div_ceil(left)));
        kept.sort_unstable();
        kept.dedup();
    }
    kept
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_column_keeps_its_highest_and_lowest_reading() {
        let n = 2 * DOTS_MAX;
        // 100 readings a column; a saw as height, one outlier in the middle of a column.
        let x_px: Vec<f64> = (0..n).map(|i| i as f64 / 100.0).collect();
        let mut y: Vec<f64> = (0..n).map(|i| (i * 37 % 100) as f64).collect();
        y[5_050] = -1e6;
        let kept = drawn(&x_px, &[&y]);
        assert!((DOTS_MAX / 2..=DOTS_MAX).contains(&kept.len()), "{}", kept.len());
        assert!(kept.is_sorted() && kept.contains(&5_050));
        for column in 0..n / 100 {
            let all = 100 * column..100 * (column + 1);
            let by_value = |a: &usize, b: &usize| y[*a].total_cmp(&y[*b]);
            let (least, most) = (all.clone().min_by(by_value), all.max_by(by_value));
            assert!(kept.contains(&least.unwrap()) && kept.contains(&most.unwrap()));
        }
    }

    #[test]
    fn a_series_that_is_short_enough_is_drawn_whole() {
        assert_eq!(drawn(&vec![1.0; DOTS_MAX], &[]).len(), DOTS_MAX);
        let kept = drawn(&vec![1.0; DOTS_MAX + 1], &[&vec![3.0; DOTS_MAX + 1]]);
        assert!((2..=DOTS_MAX).contains(&kept.len()));
    }
}
