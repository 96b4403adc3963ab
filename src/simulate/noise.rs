//! Random numbers of made maps.

use rand::{Rng, SeedableRng};
use rand_pcg::Pcg64Mcg;

/// The seed of a stream of random numbers of its own: FNV-1a over the bytes of name, seed and
/// index, finished with the mixer of SplitMix64.
pub fn stream_seed(seed: u64, index: u64, name: &str) -> u64 {
    let numbers = seed.to_le_bytes().into_iter().chain(index.to_le_bytes());
    let hash = name.bytes().chain(numbers).fold(0xcbf2_9ce4_8422_2325u64, |hash, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01b3)
    });
    let mixed = (hash ^ (hash >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    let mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    mixed ^ (mixed >> 31)
}

/// A stream of random numbers.
pub struct Draws(Pcg64Mcg);

impl Draws {
    const SCALE: f64 = 1.0 / (1u64 << 53) as f64;

    /// The stream of a seed.
    pub fn new(seed: u64) -> Self {
        Self(Pcg64Mcg::seed_from_u64(seed))
    }

    /// Uniform in [0, 1).
    pub fn uniform(&mut self) -> f64 {
        (self.0.next_u64() >> 11) as f64 * Self::SCALE
    }

    /// Uniform in (0, 1].
    pub fn open_uniform(&mut self) -> f64 {
        ((self.0.next_u64() >> 11) as f64 + 1.0) * Self::SCALE
    }

    /// Gaussian with mean 0 and standard deviation 1 (Box & Muller 1958).
    pub fn normal(&mut self) -> f64 {
        let radius = (-2.0 * libm::log(self.open_uniform())).sqrt();
        radius * libm::cos(2.0 * std::f64::consts::PI * self.uniform())
    }
}
