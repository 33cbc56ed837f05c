//! Changes of sign of a sampled function along a line, without those that noise makes.

/// What counts.
#[derive(Debug, Clone, Copy)]
pub(super) struct Criteria {
    /// Size of a value that is not told from zero.
    pub(super) zero: f64,
    /// A stretch of one sign whose evidence stays below this everywhere is put down to noise and taken out.
    pub(super) weak: f64,
    /// A stretch shorter than this, between two changes, is taken out.
    pub(super) shortest: f64,
    /// Longest distance between two samples of clear sign with a single change between them.
    pub(super) longest_gap: f64,
}

/// Value at a sample.
#[derive(Debug, Clone, Copy)]
pub(super) struct Sample {
    pub(super) value: f64,
    /// Evidence for a negative and for a positive sign.
    pub(super) evidence: [f64; 2],
}

impl Sample {
    /// Evidence for the sign it has.
    fn own(&self) -> f64 {
        self.evidence[usize::from(self.value > 0.0)]
    }
}

/// A change of sign.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct SignChange {
    /// Where.
    pub(super) at: f64,
    /// Whether from negative to positive.
    pub(super) rising: bool,
}

/// Halvings when a change of sign is located.
const BISECTIONS: usize = 48;

/// A stretch of one sign.
#[derive(Debug, Clone, Copy)]
struct Lobe {
    positive: bool,
    peak: f64,
}

/// Lobes in order with the changes of sign between them.
#[derive(Debug, Default)]
struct Run {
    lobes: Vec<Lobe>,
    changes: Vec<f64>,
    last: f64,
}

/// Changes of sign of `value` found from increasing `samples`; `period` is the length of a closed line.
///
/// Where the value is `None` the line is cut.  Weak stretches go first, the weakest at first, then short ones.
pub(super) fn sign_changes(
    samples: &[f64],
    period: Option<f64>,
    criteria: &Criteria,
    value: &impl Fn(f64) -> Option<Sample>,
) -> Vec<SignChange> {
    let mut values: Vec<(f64, Option<Sample>)> = samples.iter().map(|&s| (s, value(s))).collect();
    if let Some(period) = period {
        // Begin and end inside the strongest stretch, which nothing takes out.
        let size = |f: Option<Sample>| f.map_or(f64::NEG_INFINITY, |f| f.own());
        let strongest = (0..values.len()).max_by(|&a, &b| size(values[a].1).total_cmp(&size(values[b].1)));
        let Some(start) = strongest else { return Vec::new() };
        values.rotate_left(start);
        let wrapped = values.len() - start;
        for (s, _) in values.iter_mut().skip(wrapped) {
            *s += period;
        }
        let (s, f) = values[0];
        values.push((s + period, f));
    }
    let mut found = Vec::new();
    for mut run in runs(&values, criteria, value) {
        run.reduce(criteria);
        found.extend(
            run.changes.iter().zip(&run.lobes).map(|(&at, before)| SignChange { at, rising: !before.positive }),
        );
    }
    found
}

fn runs(values: &[(f64, Option<Sample>)], criteria: &Criteria, value: &impl Fn(f64) -> Option<Sample>) -> Vec<Run> {
    let mut runs = Vec::new();
    let mut run = Run::default();
    for &(s, f) in values {
        let Some(sample) = f else {
            runs.push(std::mem::take(&mut run));
            continue;
        };
        if sample.value.abs() <= criteria.zero {
            continue;
        }
        if !run.lobes.is_empty() && s - run.last > criteria.longest_gap {
            runs.push(std::mem::take(&mut run));
        }
        let positive = sample.value > 0.0;
        let peak = sample.own();
        match run.lobes.last_mut() {
            Some(lobe) if lobe.positive == positive => lobe.peak = lobe.peak.max(peak),
            Some(_) => {
                run.changes.push(bisected(run.last, s, !positive, value));
                run.lobes.push(Lobe { positive, peak });
            }
            None => run.lobes.push(Lobe { positive, peak }),
        }
        run.last = s;
    }
    runs.push(run);
    runs
}

/// Where the sign changes between `low`, where the value is `positive`, and `high`, where it is not.
fn bisected(low: f64, high: f64, positive: bool, value: &impl Fn(f64) -> Option<Sample>) -> f64 {
    let (mut low, mut high) = (low, high);
    for _ in 0..BISECTIONS {
        let middle = 0.5 * (low + high);
        match value(middle) {
            Some(f) if f.value != 0.0 && (f.value > 0.0) == positive => low = middle,
            Some(_) => high = middle,
            None => break,
        }
    }
    0.5 * (low + high)
}

impl Run {
    fn reduce(&mut self, criteria: &Criteria) {
        let weakest = |run: &Run| {
            let weak = (0..run.lobes.len()).filter(|&k| run.lobes[k].peak < criteria.weak);
            weak.min_by(|&a, &b| run.lobes[a].peak.total_cmp(&run.lobes[b].peak))
        };
        let narrowest = |run: &Run| {
            let width = |k: usize| run.changes[k] - run.changes[k - 1];
            let short = (1..run.changes.len()).filter(|&k| width(k) < criteria.shortest);
            short.min_by(|&a, &b| width(a).total_cmp(&width(b)))
        };
        while let Some(k) = if self.changes.is_empty() { None } else { weakest(self).or_else(|| narrowest(self)) } {
            self.take_out(k);
        }
    }

    /// Takes out lobe `k`: its neighbors become one; at an end its one change of sign goes with it.
    fn take_out(&mut self, k: usize) {
        let last = self.lobes.len() - 1;
        if k == 0 {
            self.lobes.remove(0);
            self.changes.remove(0);
        } else if k == last {
            self.lobes.pop();
            self.changes.pop();
        } else {
            self.lobes[k - 1].peak = self.lobes[k - 1].peak.max(self.lobes[k + 1].peak);
            self.lobes.drain(k..=k + 1);
            self.changes.drain(k - 1..=k);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const PLAIN: Criteria = Criteria { zero: 1e-12, weak: 0.0, shortest: 0.0, longest_gap: 1.0 };

    fn plain(value: impl Fn(f64) -> Option<f64>) -> impl Fn(f64) -> Option<Sample> {
        move |s| value(s).map(|value| Sample { value, evidence: [-value, value] })
    }

    fn samples(n: u32, length: f64) -> Vec<f64> {
        (0..=n).map(|k| length * f64::from(k) / f64::from(n)).collect()
    }

    #[test]
    fn changes_come_back_with_position_and_sense_also_when_sampled_exactly() {
        let value = |s: f64| Some((s - 1.0) * (3.0 - s));
        let found = sign_changes(&samples(16, 4.0), None, &PLAIN, &plain(value));
        assert_eq!(found.iter().map(|c| c.rising).collect::<Vec<_>>(), [true, false]);
        approx::assert_abs_diff_eq!(found[0].at, 1.0, epsilon = 1e-9);
        approx::assert_abs_diff_eq!(found[1].at, 3.0, epsilon = 1e-9);
    }

    #[test]
    fn a_closed_line_has_as_many_rises_as_falls() {
        let points: Vec<f64> = samples(40, 10.0).into_iter().take(40).collect();
        let value = |s: f64| Some((std::f64::consts::TAU * s / 10.0 + 0.3).sin());
        let found = sign_changes(&points, Some(10.0), &PLAIN, &plain(value));
        assert_eq!(found.len(), 2);
        assert_ne!(found[0].rising, found[1].rising);
        // sin(2 pi s / 10 + 0.3) rises through zero at s = -3 / (2 pi)
        let rise = found.iter().find(|c| c.rising).unwrap().at.rem_euclid(10.0);
        approx::assert_abs_diff_eq!(rise, 10.0 - 3.0 / std::f64::consts::TAU, epsilon = 1e-9);
    }

    #[test]
    fn weak_and_short_stretches_leave_no_change_behind() {
        // +5, a dip of -0.2, +5, a true -4 of length 2, a narrow +3
        let value = |s: f64| {
            Some(match s {
                s if s < 2.0 => 5.0,
                s if s < 3.1 => -0.2,
                s if s < 5.0 => 5.0,
                s if s < 7.0 => -4.0,
                s if s < 7.3 => 3.0,
                _ => -4.0,
            })
        };
        let found = |weak, shortest| {
            let criteria = Criteria { weak, shortest, ..PLAIN };
            sign_changes(&samples(100, 10.0), None, &criteria, &plain(value)).iter().map(|c| c.at).collect::<Vec<_>>()
        };
        assert_eq!(found(0.0, 0.0).len(), 5);
        assert_eq!(found(0.5, 0.0).len(), 3);
        let clear = found(0.5, 0.5);
        assert_eq!(clear.len(), 1);
        approx::assert_abs_diff_eq!(clear[0], 5.0, epsilon = 1e-9);
        assert!(found(6.0, 0.0).is_empty());
    }

    #[test]
    fn no_change_is_claimed_across_a_cut_or_a_long_zero() {
        let cut = |s: f64| if (4.0..6.0).contains(&s) { None } else { Some(s - 5.0) };
        assert!(sign_changes(&samples(40, 10.0), None, &PLAIN, &plain(cut)).is_empty());
        let rest = |s: f64| Some(if (4.0..6.0).contains(&s) { 0.0 } else { s - 5.0 });
        assert!(sign_changes(&samples(40, 10.0), None, &PLAIN, &plain(rest)).is_empty());
    }
}
