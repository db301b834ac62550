//! Hyperexponential: each wait is exponential, at one of two or three rates. Its remaining wait grows with age
//! although its tail is light.

use super::exponential::ExponentialLaw;
use super::mixture::{Mixture, free_mixture};
use super::prelude::*;

/// `S(t) = p·exp(-rate_1·t) + (1-p)·exp(-rate_2·t)`, reported with `rate_1 > rate_2`.
pub struct Hyperexponential;

/// Three rates, reported falling; `p_1` and `p_2` belong to the first two. The light counterpart of Lomax.
pub struct Hyperexponential3;

const TWO: [Coordinate; 3] = [
    Coordinate::new("p", Kind::Share),
    Coordinate::new("rate_1", Kind::Rate),
    Coordinate::new("rate_2", Kind::Rate),
];

const THREE: [Coordinate; 5] = [
    Coordinate::new("p_1", Kind::Share),
    Coordinate::new("p_2", Kind::Share),
    Coordinate::new("rate_1", Kind::Rate),
    Coordinate::new("rate_2", Kind::Rate),
    Coordinate::new("rate_3", Kind::Rate),
];

fn law<const N: usize>(x: &[f64]) -> Option<Box<dyn Law>> {
    boxed(Mixture::<_, N>::new(x, ExponentialLaw::new, |part| -part.parameters()[0]))
}

impl Family for Hyperexponential {
    fn name(&self) -> &'static str {
        "hyperexponential"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        TWO.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        law::<2>(x)
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        free_mixture::<2>(natural, &TWO[1..])
    }

    /// Two equal parts a factor apart; a slow tenth; a fast tenth.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let rate = -about.mean.ln();
        let fast = (std::f64::consts::LN_2 / about.median).ln().max(rate);
        // The slow part's 90% point of the whole: of the tenth left there, nearly all is slow.
        let slow = (1.0 / about.high).ln().min(rate);
        vec![
            vec![0.0, fast + 0.8, rate.min(fast) - 0.8],
            vec![2.2, fast + 0.1, slow - 0.7],
            vec![-2.2, rate + 2.0, rate - 0.1],
        ]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

impl Family for Hyperexponential3 {
    fn name(&self) -> &'static str {
        "hyperexponential_3"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        THREE.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        law::<3>(x)
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        free_mixture::<3>(natural, &THREE[2..])
    }

    /// Rates a factor apart around the median's; and a lone very slow hundredth.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let rate = (std::f64::consts::LN_2 / about.median).ln();
        let slow = (-about.mean.ln()).min(-about.high.ln());
        vec![vec![0.5, 1.0, rate + 1.8, rate, rate - 1.8], vec![3.0, 2.3, rate + 0.5, slow, slow - 2.0]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}
