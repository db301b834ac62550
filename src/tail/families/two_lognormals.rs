//! Two lognormals mixed: a fast and a slow path, each with its own spread.

use super::lognormal::LognormalLaw;
use super::mixture::{Mixture, free_mixture};
use super::prelude::*;

/// `S(t) = p·S_1(t) + (1-p)·S_2(t)`, reported with `mu_1 < mu_2`.
pub struct TwoLognormals;

const COORDINATES: [Coordinate; 5] = [
    Coordinate::new("p", Kind::Share),
    Coordinate::new("mu_1", Kind::LogLocation),
    Coordinate::new("sigma_1", Kind::Shape),
    Coordinate::new("mu_2", Kind::LogLocation),
    Coordinate::new("sigma_2", Kind::Shape),
];

impl Family for TwoLognormals {
    fn name(&self) -> &'static str {
        "two_lognormals"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(Mixture::<_, 2>::new(x, LognormalLaw::new, |part| part.parameters()[0]))
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        free_mixture::<2>(natural, &COORDINATES[1..])
    }

    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        two_bulks(about)
            .into_iter()
            .map(|[logit, mu_1, sd_1, mu_2, sd_2]| vec![logit, mu_1, sd_1.ln(), mu_2, sd_2.ln()])
            .collect()
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Heavy
    }
}

/// Three ways to see two bulks: halves, a slow tenth, a fast tenth. Each `[logit p, mean and standard deviation of
/// ln T in the first, in the second]`.
pub(crate) fn two_bulks(about: &About) -> [[f64; 5]; 3] {
    let (low, median, high) = (about.low.ln(), about.median.ln(), about.high.ln());
    let sd = about.log_sd;
    [
        [0.0, 0.6 * low + 0.4 * median, 0.5 * sd, 0.6 * high + 0.4 * median, 0.5 * sd],
        [2.0, median - 0.1 * sd, 0.7 * sd, high + 0.7 * sd, 0.7 * sd],
        [-2.0, low - 0.3 * sd, 0.7 * sd, median + 0.1 * sd, 0.7 * sd],
    ]
}
