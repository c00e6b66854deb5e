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

/// Sums over samples `y`, counted from a level.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Moments {
    /// `sum y_n z^n` and `sum n y_n z^n`.
    pub(super) ring: [Complex64; 2],
    /// `sum n^k y_n`.
    pub(super) plain: [f64; 3],
    /// `sum y_n^2`.
    pub(super) total: f64,
}

/// All sums that a step needs, in one pass.
pub(super) fn moments(arch: Arch, samples: &[f64], level: f64, z: Complex64) -> Moments {
    arch.dispatch(Pass { samples, level, z })
}

/// A closure would be compiled apart, without the instructions that it is dispatched for.
struct Pass<'a> {
    samples: &'a [f64],
    level: f64,
    z: Complex64,
}

impl WithSimd for Pass<'_> {
    type Output = Moments;

    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) -> Moments {
        let log = self.z.ln();
        let mut all = Moments::default();
        for (index, chunk) in self.samples.chunks(LANES * FRESH).enumerate() {
            let begin = (index * LANES * FRESH) as f64;
            let own = chunk_moments(chunk, self.level, self.z);
            let turned = if index == 0 { Complex64::new(1.0, 0.0) } else { (log * begin).exp() };
            all.ring[0] += turned * own.ring[0];
            all.ring[1] += turned * (own.ring[1] + begin * own.ring[0]);
            let [zeroth, first, second] = own.plain;
            all.plain[0] += zeroth;
            all.plain[1] += first + begin * zeroth;
            all.plain[2] += second + begin * (2.0 * first + begin * zeroth);
            all.total += own.total;
        }
        all
    }
}

/// Of one chunk. Sums of a lane are summed once more as they grow: of `V` terms `t_v`, the growing sums add up to
/// `sum (V - v) t_v`, from which `sum v t_v` follows without an index beside each sample.
#[inline(always)]
fn chunk_moments(samples: &[f64], level: f64, z: Complex64) -> Moments {
    let mut power = [Complex64::new(1.0, 0.0); LANES + 1];
    for n in 1..=LANES {
        power[n] = power[n - 1] * z;
    }
    let step = power[LANES];
    let mut re: [f64; LANES] = std::array::from_fn(|n| power[n].re);
    let mut im: [f64; LANES] = std::array::from_fn(|n| power[n].im);
    let (mut cosine, mut sine, mut cosines, mut sines) = ([0.0; LANES], [0.0; LANES], [0.0; LANES], [0.0; LANES]);
    let (mut sum, mut sums, mut summed, mut squares) = ([0.0; LANES], [0.0; LANES], [0.0; LANES], [0.0; LANES]);
    let (vectors, rest) = samples.as_chunks::<LANES>();
    for vector in vectors {
        for n in 0..LANES {
            let sample = vector[n] - level;
            cosine[n] += sample * re[n];
            sine[n] += sample * im[n];
            cosines[n] += cosine[n];
            sines[n] += sine[n];
            sum[n] += sample;
            sums[n] += sum[n];
            summed[n] += sums[n];
            squares[n] += sample * sample;
            let turned = re[n] * step.re - im[n] * step.im;
            im[n] = re[n] * step.im + im[n] * step.re;
            re[n] = turned;
        }
    }
    let count = vectors.len() as f64;
    let mut all = Moments::default();
    for n in 0..LANES {
        let lane = n as f64;
        let ring = Complex64::new(cosine[n], sine[n]);
        let moved = count * ring - Complex64::new(cosines[n], sines[n]);
        all.ring[0] += ring;
        all.ring[1] += LANES as f64 * moved + lane * ring;
        // Of v: sum v t, and sum v^2 t from the sums of the sums, which weigh by (V - v) (V - v + 1) / 2.
        let first = count * sum[n] - sums[n];
        let second = 2.0 * summed[n] - sums[n] - count * count * sum[n] + 2.0 * count * first;
        let lanes = LANES as f64;
        all.plain[0] += sum[n];
        all.plain[1] += lanes * first + lane * sum[n];
        all.plain[2] += lanes * lanes * second + 2.0 * lanes * lane * first + lane * lane * sum[n];
        all.total += squares[n];
    }
    for (n, sample) in rest.iter().enumerate() {
        let (sample, index) = (sample - level, (vectors.len() * LANES + n) as f64);
        let ring = Complex64::new(sample * re[n], sample * im[n]);
        all.ring[0] += ring;
        all.ring[1] += index * ring;
        all.plain[0] += sample;
        all.plain[1] += index * sample;
        all.plain[2] += index * index * sample;
        all.total += sample * sample;
    }
    all
}

/// Means of blocks of `block` samples; what is left over at the end is left out.
pub(super) fn block_means(arch: Arch, samples: &[f64], block: usize) -> Vec<f64> {
    let mut means = vec![0.0; samples.len() / block];
    arch.dispatch(BlockMeans { samples, block, means: &mut means });
    means
}

struct BlockMeans<'a> {
    samples: &'a [f64],
    block: usize,
    means: &'a mut [f64],
}

impl WithSimd for BlockMeans<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let share = 1.0 / self.block as f64;
        for (mean, chunk) in self.means.iter_mut().zip(self.samples.chunks_exact(self.block)) {
            *mean = share * lane_sum(chunk);
        }
    }
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

/// Angle over the record, or decay, from which the recurrence of [`geometric`] loses no digits.
const TURNED: f64 = 4.0;

/// `sum n^k z^n` for n below `count` and k below `K` (at most 5), with `z^count` at hand. Summation by parts,
/// `(z - 1) S_k = N^k z^N - [k = 0] - z sum_{j<k} binomial(k, j) S_j`, where `z` is far enough from one; doubling elsewhere.
pub(super) fn geometric<const K: usize>(z: Complex64, last: Complex64, count: usize) -> [Complex64; K] {
    let away = z - 1.0;
    if away.norm() * (count as f64) < TURNED {
        return doubled(z, count);
    }
    let (inverse, ends) = (away.inv(), powers::<K>(count as f64));
    let mut sums = [Complex64::default(); K];
    for k in 0..K {
        let before: Complex64 = (0..k).map(|j| sums[j] * BINOMIAL[k][j]).sum();
        let first = if k == 0 { 1.0 } else { 0.0 };
        sums[k] = (last * ends[k] - first - z * before) * inverse;
    }
    sums
}

/// What [`geometric`] is for, of a real factor or a complex one: by doubling, every term of one order, so that nothing cancels however
/// near `z` is to one.
pub(super) fn doubled<T: Factor, const K: usize>(z: T, count: usize) -> [T; K] {
    let mut sums = [T::default(); K];
    let (mut done, mut power) = (0_usize, T::from(1.0));
    for bit in (0..usize::BITS - count.leading_zeros()).rev() {
        let shift = powers::<K>(done as f64);
        let mut doubled = sums;
        for k in 0..K {
            // The second half is the first, moved by `done`: (n + done)^k by the binomial theorem.
            let mut moved = T::default();
            for j in 0..=k {
                moved = moved + sums[k - j] * (BINOMIAL[k][j] * shift[j]);
            }
            doubled[k] = doubled[k] + power * moved;
        }
        (sums, done, power) = (doubled, 2 * done, power * power);
        if count >> bit & 1 == 1 {
            let at = powers::<K>(done as f64);
            (0..K).for_each(|k| sums[k] = sums[k] + power * at[k]);
            (done, power) = (done + 1, power * z);
        }
    }
    sums
}

/// A real or a complex number.
pub(super) trait Factor:
    Copy
    + Default
    + From<f64>
    + std::ops::Add<Output = Self>
    + std::ops::Mul<Output = Self>
    + std::ops::Mul<f64, Output = Self>
{
}

impl Factor for f64 {}
impl Factor for Complex64 {}

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
