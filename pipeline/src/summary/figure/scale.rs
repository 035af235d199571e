//! From data to pixels, and ticks at round numbers.

/// A linear map from a range of the data to a range of pixels.
#[derive(Clone, Copy, Debug)]
pub(super) struct Scale {
    lowest: f64,
    highest: f64,
    from: f64,
    to: f64,
}

impl Scale {
    /// Maps `lowest..highest` to `from..to` pixels; an empty or non-finite range is widened to one unit.
    pub(super) fn new(lowest: f64, highest: f64, from: f64, to: f64) -> Self {
        let usable = (highest - lowest).is_finite() && highest > lowest;
        let (lowest, highest) = if usable { (lowest, highest) } else { (0.0, 1.0) };
        Self {
            lowest,
            highest,
            from,
            to,
        }
    }

    /// The pixel of a value, whether in range or not.
    pub(super) fn at(&self, value: f64) -> f64 {
        self.from + (value - self.lowest) / (self.highest - self.lowest) * (self.to - self.from)
    }

    /// The pixel of a value, held within the range.
    pub(super) fn clamped(&self, value: f64) -> f64 {
        self.at(value.clamp(self.lowest, self.highest))
    }

    /// Whether a value is within the range.
    pub(super) fn holds(&self, value: f64) -> bool {
        value >= self.lowest && value <= self.highest
    }
}

/// Ticks at multiples of 1, 2 or 5 times a power of ten within `lowest..=highest`, about `wanted` of them, with labels.
pub(super) fn ticks(lowest: f64, highest: f64, wanted: usize) -> Vec<(f64, String)> {
    let span = highest - lowest;
    if !(span > 0.0 && span.is_finite()) || wanted == 0 {
        return Vec::new();
    }
    let rough = span / wanted as f64;
    let power = 10f64.powf(rough.log10().floor());
    let miss = |step: &f64| (span / step - wanted as f64).abs();
    let step = [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|m| m * power)
        .min_by(|a, b| miss(a).total_cmp(&miss(b)))
        .unwrap_or(power);
    let first = (lowest / step - 1e-9).ceil();
    let last = (highest / step + 1e-9).floor();
    if !(first.is_finite() && last.is_finite() && last - first < 1000.0 && first.abs() < 1e12) {
        return Vec::new();
    }
    (0..=(last - first) as usize)
        .map(|i| {
            let value = (first + i as f64) * step;
            (value, label(value, step))
        })
        .collect()
}

fn label(value: f64, step: f64) -> String {
    if value == 0.0 {
        return "0".into();
    }
    let text = if value.abs() >= 1e6 || step < 1e-4 {
        // As many digits as the step tells apart.
        let digits = (value.abs().log10().floor() - step.log10().floor()).clamp(0.0, 12.0) as usize;
        format!("{value:.digits$e}")
    } else {
        let decimals = (-step.log10().floor()).clamp(0.0, 6.0) as usize;
        format!("{value:.decimals$}")
    };
    text.replace('-', "\u{2212}")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn labels(lowest: f64, highest: f64, wanted: usize) -> Vec<String> {
        ticks(lowest, highest, wanted)
            .into_iter()
            .map(|(_, label)| label)
            .collect()
    }

    #[test]
    fn ticks_are_round() {
        assert_eq!(labels(0.0, 100.0, 5), ["0", "20", "40", "60", "80", "100"]);
        assert_eq!(labels(-60.0, 410.0, 5), ["0", "100", "200", "300", "400"]);
        assert_eq!(labels(0.0, 1.0, 4), ["0", "0.2", "0.4", "0.6", "0.8", "1.0"]);
        assert_eq!(labels(0.0, 129.0, 5), ["0", "20", "40", "60", "80", "100", "120"]);
        assert_eq!(
            labels(-0.1, 0.1, 4),
            ["\u{2212}0.10", "\u{2212}0.05", "0", "0.05", "0.10"]
        );
        assert_eq!(labels(0.0, 2.0e7, 2), ["0", "1e7", "2e7"]);
        assert!(labels(1.0, 1.0, 5).is_empty());
        assert!(labels(0.0, f64::INFINITY, 5).is_empty());
        assert!(labels(1e300, 1.000001e300, 5).len() < 10);
    }

    #[test]
    fn scales_map_and_hold() {
        let scale = Scale::new(0.0, 10.0, 100.0, 0.0);
        assert_eq!(scale.at(5.0), 50.0);
        assert_eq!(scale.clamped(20.0), 0.0);
        assert_eq!(scale.clamped(f64::INFINITY), 0.0);
        assert!(Scale::new(3.0, 3.0, 0.0, 1.0).at(3.0).is_finite());
    }
}
