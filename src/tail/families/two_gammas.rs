//! Two gammas mixed: the light counterpart of the two-lognormal mixture, for the verdict on the tail.

use super::gamma::{GammaLaw, shape_of_log_sd};
use super::mixture::{Mixture, free_mixture};
use super::prelude::*;
use super::two_lognormals::two_bulks;

/// `S(t) = p·S_1(t) + (1-p)·S_2(t)`, reported with the smaller mean first.
pub struct TwoGammas;

const COORDINATES: [Coordinate; 5] = [
    Coordinate::new("p", Kind::Share),
    Coordinate::new("shape_1", Kind::Shape),
    Coordinate::new("scale_1", Kind::Scale),
    Coordinate::new("shape_2", Kind::Shape),
    Coordinate::new("scale_2", Kind::Scale),
];

impl Family for TwoGammas {
    fn name(&self) -> &'static str {
        "two_gammas"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(Mixture::<_, 2>::new(x, GammaLaw::new, |part| part.mean()))
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        free_mixture::<2>(natural, &COORDINATES[1..])
    }

    /// Those of two lognormals, each part's place and spread kept.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let gamma = |place: f64, sd: f64| {
            let shape = shape_of_log_sd(sd);
            [shape.ln(), place + 0.5 * sd * sd - shape.ln()]
        };
        two_bulks(about)
            .into_iter()
            .map(|[logit, place_1, sd_1, place_2, sd_2]| {
                let ([a, b], [c, d]) = (gamma(place_1, sd_1), gamma(place_2, sd_2));
                vec![logit, a, b, c, d]
            })
            .collect()
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}
