//! Means and scatter, summed about the mean so that nothing cancels.

/// Arithmetic mean, corrected by the mean of the remainders. `None` for no
/// values or when the sum leaves the range of a double.
pub fn mean(values: &[f64]) -> Option<f64> {
    if values.is_empty() {
        return None;
    }
    let n = values.len() as f64;
    let first = values.iter().sum::<f64>() / n;
    let mean = first + values.iter().map(|v| v - first).sum::<f64>() / n;
    mean.is_finite().then_some(mean)
}

/// Standard uncertainty of a mean: sample standard deviation over √n, from
/// two values on (JCGM 100:2008, 4.2.3).
pub fn mean_uncertainty(values: &[f64]) -> Option<f64> {
    let n = values.len() as f64;
    if values.len() < 2 {
        return None;
    }
    let mean = mean(values)?;
    let squares: f64 = values.iter().map(|v| (v - mean) * (v - mean)).sum();
    let u = libm::sqrt(squares / (n - 1.0) / n);
    u.is_finite().then_some(u)
}

/// Smallest and largest of some finite values.
pub fn range(values: impl IntoIterator<Item = f64>) -> Option<(f64, f64)> {
    values.into_iter().fold(None, |range, v| match range {
        None => Some((v, v)),
        Some((low, high)) => Some((low.min(v), high.max(v))),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn small_samples() {
        assert_eq!(mean(&[]), None);
        assert_eq!(mean(&[18.0, 19.0]), Some(18.5));
        assert_eq!(mean_uncertainty(&[18.0]), None);
        // sd = 1/√2, over √2.
        assert!((mean_uncertainty(&[18.0, 19.0]).unwrap() - 0.5).abs() < 1e-15);
        assert_eq!(mean(&[f64::MAX, f64::MAX]), None);
        assert_eq!(range([3.0, 1.0, 2.0]), Some((1.0, 3.0)));
        assert_eq!(range([]), None);
    }
}
