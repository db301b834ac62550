//! The ages at which a stream's small picture is drawn.

use crate::advise::Survival;

/// Ages from a microsecond to three years, twelve a decade: a step is a pixel or two of a small picture.
pub(super) fn ages() -> Vec<f64> {
    (-72..=96).map(|step| 10f64.powf(f64::from(step) / 12.0)).collect()
}

/// The part of a curve in which something happens, from the last age at which all wait to the first at which none does;
/// with the edge of sight at the end.
pub(super) fn trimmed(fine: &Survival) -> Vec<[f64; 2]> {
    let points = &fine.points;
    let first = points.partition_point(|point| point[1] >= 1.0).saturating_sub(1);
    let mut kept: Vec<[f64; 2]> = points.get(first..).unwrap_or_default().to_vec();
    let none = kept.partition_point(|point| point[1] > 0.0);
    kept.truncate(none + 1);
    if let Some(last) = kept.last().copied().filter(|last| last[0] < fine.sight_s && last[1] > 0.0) {
        kept.push([fine.sight_s, last[1]]);
    }
    kept
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_what_happens_is_kept() {
        let share = |age: f64| if age < 1.0 { 1.0 } else { (1.5 - age / 2.0).clamp(0.0, 1.0) };
        let points = ages().into_iter().map(|age| [age, share(age)]).collect();
        let fine = Survival { waits: 10.0, sight_s: 3.0, restricted_mean_s: 2.0, points };
        let kept = trimmed(&fine);
        assert!(kept.len() < 20 && kept[0][1] == 1.0 && kept[1][1] < 1.0, "{kept:?}");
        assert_eq!(kept.iter().filter(|point| point[1] == 0.0).count(), 1);
        let seen = Survival {
            points: fine.points.into_iter().filter(|p| p[0] < 2.0).collect(),
            sight_s: 2.0,
            ..fine
        };
        assert_eq!(trimmed(&seen).last().unwrap()[0], 2.0);
        assert!(trimmed(&Survival { points: Vec::new(), ..seen }).is_empty());
    }
}
