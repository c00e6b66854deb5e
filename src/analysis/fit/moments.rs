//! The sums that a least-squares step of a damped sinusoid is made of: one vectorised pass over the samples, and the sums without
//! samples in closed form.

use pulp::{Arch, Simd, WithSimd};
use realfft::num_complex::Complex64;

/// Which vector instructions a fit may use.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Instructions {
    /// What this processor was found to have.
    #[default]
    Detected,
    /// What every processor of the family has: to compare with.
    Baseline,
}

impl Instructions {
    pub(super) fn arch(self) -> Arch {
        match self {
            Self::Detected => Arch::new(),
            Self::Baseline => Arch::Scalar,
        }
    }
}

/// Samples taken at once; two vectors of four doubles, so that two chains of multiplications run beside each other.
const LANES: usize = 8;
/// Vectors between fresh starts of the recurrence, so that rounding does not pile up.
const FRESH: usize = 128;

/// `sum y_n z^n` and `sum n y_n z^n`, with `y` counted from `level`.
pub(super) fn moments(arch: Arch, samples: &[f64], level: f64, z: Complex64) -> [Complex64; 2] {
    arch.dispatch(Moments { samples, level, z })
}

/// A closure would be compiled apart, without the instructions that it is dispatched for.
struct Moments<'a> {
    samples: &'a [f64],
    level: f64,
    z: Complex64,
}

impl WithSimd for Moments<'_> {
    type Output = [Complex64; 2];

    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) -> Self::Output {
        chunked(self.samples, self.level, self.z)
    }
}

#[inline(always)]
fn chunked(samples: &[f64], level: f64, z: Complex64) -> [Complex64; 2] {
    let log = z.ln();
    let mut total = [Complex64::default(); 2];
    for (index, chunk) in samples.chunks(LANES * FRESH).enumerate() {
        let begin = (index * LANES * FRESH) as f64;
        let [zeroth, first] = chunk_moments(chunk, level, z);
        let turned = (log * begin).exp();
        total[0] += turned * zeroth;
        total[1] += turned * (first + begin * zeroth);
    }
    total
}

#[inline(always)]
fn chunk_moments(samples: &[f64], level: f64, z: Complex64) -> [Complex64; 2] {
    let mut power = [Complex64::new(1.0, 0.0); LANES + 1];
    for n in 1..=LANES {
        power[n] = power[n - 1] * z;
    }
    let step = power[LANES];
    let mut re: [f64; LANES] = std::array::from_fn(|n| power[n].re);
    let mut im: [f64; LANES] = std::array::from_fn(|n| power[n].im);
    let mut index: [f64; LANES] = std::array::from_fn(|n| n as f64);
    let mut sums = [[0.0; LANES]; 4];
    let (vectors, rest) = samples.as_chunks::<LANES>();
    for vector in vectors {
        for n in 0..LANES {
            let sample = vector[n] - level;
            let (cosine, sine) = (sample * re[n], sample * im[n]);
            sums[0][n] += cosine;
            sums[1][n] += sine;
            sums[2][n] += index[n] * cosine;
            sums[3][n] += index[n] * sine;
            let turned = re[n] * step.re - im[n] * step.im;
            im[n] = re[n] * step.im + im[n] * step.re;
            re[n] = turned;
            index[n] += LANES as f64;
        }
    }
    for (n, sample) in rest.iter().enumerate() {
        let (cosine, sine) = ((sample - level) * re[n], (sample - level) * im[n]);
        sums[0][n] += cosine;
        sums[1][n] += sine;
        sums[2][n] += index[n] * cosine;
        sums[3][n] += index[n] * sine;
    }
    let sum = |k: usize| sums[k].iter().sum::<f64>();
    [Complex64::new(sum(0), sum(1)), Complex64::new(sum(2), sum(3))]
}

/// Sums of `n^k y_n` for k from 0 to 2, and of `y_n^2`, with `y` counted from `level`.
pub(super) fn power_moments(arch: Arch, samples: &[f64], level: f64) -> ([f64; 3], f64) {
    arch.dispatch(PowerMoments { samples, level })
}

struct PowerMoments<'a> {
    samples: &'a [f64],
    level: f64,
}

impl WithSimd for PowerMoments<'_> {
    type Output = ([f64; 3], f64);

    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) -> Self::Output {
        let Self { samples, level } = self;
        let mut sums = [[0.0; LANES]; 4];
        let mut index: [f64; LANES] = std::array::from_fn(|n| n as f64);
        let (vectors, rest) = samples.as_chunks::<LANES>();
        for vector in vectors {
            for n in 0..LANES {
                let sample = vector[n] - level;
                let moved = index[n] * sample;
                sums[0][n] += sample;
                sums[1][n] += moved;
                sums[2][n] += index[n] * moved;
                sums[3][n] += sample * sample;
                index[n] += LANES as f64;
            }
        }
        for (n, sample) in rest.iter().map(|sample| sample - level).enumerate() {
            sums[0][n] += sample;
            sums[1][n] += index[n] * sample;
            sums[2][n] += index[n] * index[n] * sample;
            sums[3][n] += sample * sample;
        }
        let sum = |k: usize| sums[k].iter().sum::<f64>();
        ([sum(0), sum(1), sum(2)], sum(3))
    }
}

/// Means of blocks of `block` samples; what is left over at the end is left out.
pub(super) fn block_means(arch: Arch, samples: &[f64], block: usize) -> Vec<f64> {
    let share = 1.0 / block as f64;
    let mut means = vec![0.0; samples.len() / block];
    arch.dispatch(|| {
        for (mean, chunk) in means.iter_mut().zip(samples.chunks_exact(block)) {
            *mean = share * lane_sum(chunk);
        }
    });
    means
}

#[inline(always)]
fn lane_sum(samples: &[f64]) -> f64 {
    let (vectors, rest) = samples.as_chunks::<LANES>();
    let mut sums = [0.0; LANES];
    for vector in vectors {
        for n in 0..LANES {
            sums[n] += vector[n];
        }
    }
    sums.iter().sum::<f64>() + rest.iter().sum::<f64>()
}

/// `sum n^k z^n` for n below `count` and k below `K` (at most 5), by doubling: every term is of one order, so that nothing cancels
/// however near `z` is to one.
pub(super) fn geometric<const K: usize>(z: Complex64, count: usize) -> [Complex64; K] {
    let mut sums = [Complex64::default(); K];
    let (mut done, mut power) = (0_usize, Complex64::new(1.0, 0.0));
    for bit in (0..usize::BITS - count.leading_zeros()).rev() {
        let shift = powers::<K>(done as f64);
        let mut doubled = sums;
        for k in 0..K {
            // The second half is the first, moved by `done`: (n + done)^k by the binomial theorem.
            let moved: Complex64 = (0..=k).map(|j| sums[k - j] * (BINOMIAL[k][j] * shift[j])).sum();
            doubled[k] += power * moved;
        }
        (sums, done, power) = (doubled, 2 * done, power * power);
        if count >> bit & 1 == 1 {
            let at = powers::<K>(done as f64);
            (0..K).for_each(|k| sums[k] += power * at[k]);
            (done, power) = (done + 1, power * z);
        }
    }
    sums
}

const BINOMIAL: [[f64; 5]; 5] = [
    [1.0, 0.0, 0.0, 0.0, 0.0],
    [1.0, 1.0, 0.0, 0.0, 0.0],
    [1.0, 2.0, 1.0, 0.0, 0.0],
    [1.0, 3.0, 3.0, 1.0, 0.0],
    [1.0, 4.0, 6.0, 4.0, 1.0],
];

/// `x^k` for k below `K`.
pub(super) fn powers<const K: usize>(x: f64) -> [f64; K] {
    let mut all = [1.0; K];
    (1..K).for_each(|k| all[k] = all[k - 1] * x);
    all
}
