//! Random numbers without a state: each is a hash of (seed, stream, index), so any
//! thread may draw any of them in any order and all runs agree bit for bit.

/// Finaliser of the 64-bit mix of Steele, Lea & Flood, "Fast splittable pseudorandom number
/// generators", OOPSLA 2014 (constants of Stafford's variant 13). A bijection; good enough a hash
/// to find candidates that are then compared exactly.
pub fn mix(mut z: u64) -> u64 {
    z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

/// One stream of numbers, e.g. one lane's draw.
#[derive(Debug, Clone, Copy)]
pub struct Stream {
    key: u64,
}

impl Stream {
    /// Streams of different numbers under one seed are independent for all that a test can tell.
    pub fn new(seed: u64, stream: u64) -> Self {
        let golden = 0x9e37_79b9_7f4a_7c15_u64;
        Self { key: mix(mix(seed.wrapping_add(golden)) ^ stream.wrapping_mul(golden)) }
    }

    /// 64 bits that depend on seed, stream and `index` alone, so that any order of calls will do.
    pub fn bits(&self, index: u64) -> u64 {
        mix(self.key.wrapping_add(index.wrapping_mul(0x9e37_79b9_7f4a_7c15)))
    }

    /// Uniform in the open interval (0, 1).
    pub fn uniform(&self, index: u64) -> f64 {
        ((self.bits(index) >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    /// Standard normal (Box & Muller 1958). Uses the indices 2·index and 2·index + 1.
    pub fn normal(&self, index: u64) -> f64 {
        let radius = (-2.0 * self.uniform(2 * index).ln()).sqrt();
        radius * (std::f64::consts::TAU * self.uniform(2 * index + 1)).cos()
    }

    /// −1 or +1, each with probability one half.
    pub fn sign(&self, index: u64) -> f64 {
        if self.bits(index) >> 63 == 0 { -1.0 } else { 1.0 }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn moments_of_uniform_and_normal() {
        let stream = Stream::new(3, 5);
        let n = 200_000u64;
        let mean = |f: &dyn Fn(u64) -> f64| (0..n).map(f).sum::<f64>() / n as f64;
        // Standard errors: uniform mean sqrt(1/12/n) = 6.5e-4, normal mean 2.2e-3,
        // normal second moment sqrt(2/n) = 3.2e-3; bounds are five of them.
        assert!((mean(&|i| stream.uniform(i)) - 0.5).abs() < 5.0 * 6.5e-4);
        assert!(mean(&|i| stream.normal(i)).abs() < 5.0 * 2.3e-3);
        assert!((mean(&|i| stream.normal(i).powi(2)) - 1.0).abs() < 5.0 * 3.2e-3);
        assert!(mean(&|i| stream.sign(i)).abs() < 5.0 * 2.3e-3);
    }

    #[test]
    fn streams_and_seeds_differ() {
        assert_ne!(Stream::new(1, 0).bits(0), Stream::new(1, 1).bits(0));
        assert_ne!(Stream::new(1, 0).bits(0), Stream::new(2, 0).bits(0));
    }
}
