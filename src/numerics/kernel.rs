//! Branch-free elementary functions that vectorise when called in a loop (see [`crate::numerics`]).
//!
//! Errors are relative and were measured against libm and SciPy (`tests/numerics.rs`); each bound is tested.

/// Adding and subtracting this number rounds a double below 2^51 in size to the nearest integer, and leaves that integer
/// in the low bits of the sum.
const ROUND: f64 = 6_755_399_441_055_744.0; // 1.5 * 2^52

const LN2_HIGH: f64 = 6.931_471_803_691_238_16e-1;
const LN2_LOW: f64 = 1.908_214_929_270_587_70e-10;

/// The exponential, relative error below 4e-16; 0 below -708 and infinite above 709.
#[inline(always)]
pub fn exp(x: f64) -> f64 {
    let clamped = x.clamp(-708.0, 709.0);
    let shifted = clamped * std::f64::consts::LOG2_E + ROUND;
    let k = shifted - ROUND;
    let r = (clamped - k * LN2_HIGH) - k * LN2_LOW;
    // Taylor series by Estrin's scheme; |r| <= ln(2)/2, so the first omitted term is below 5e-18.
    let r2 = r * r;
    let r4 = r2 * r2;
    let p0 = 0.5 + r * (1.0 / 6.0);
    let p2 = 1.0 / 24.0 + r * (1.0 / 120.0);
    let p4 = 1.0 / 720.0 + r * (1.0 / 5_040.0);
    let p6 = 1.0 / 40_320.0 + r * (1.0 / 362_880.0);
    let p8 = 1.0 / 3_628_800.0 + r * (1.0 / 39_916_800.0);
    let p10 = 1.0 / 479_001_600.0 + r * (1.0 / 6_227_020_800.0);
    let p = (p0 + p2 * r2) + ((p4 + p6 * r2) + (p8 + p10 * r2) * r4) * r4;
    let value = 1.0 + (r + r2 * p);
    let scale = f64::from_bits((shifted.to_bits() << 52).wrapping_add(1.0_f64.to_bits()));
    let result = value * scale;
    let result = if x < -708.0 { 0.0 } else { result };
    if x > 709.0 { f64::INFINITY } else { result }
}

/// The natural logarithm of a positive normal number, error below 1 unit in the last place of the result or 1e-16;
/// other arguments give no meaningful result.
#[inline(always)]
pub fn ln(x: f64) -> f64 {
    // Split x = 2^k (1 + f) with sqrt(1/2) <= 1 + f < sqrt(2).
    const OFFSET: u64 = 0x3fe6_a09e_667f_3bcd;
    const BIAS: u64 = 1023 << 52;
    const TWO_52: u64 = 0x4330_0000_0000_0000;
    let bits = x.to_bits();
    let biased = (bits.wrapping_sub(OFFSET).wrapping_add(BIAS)) >> 52;
    let k = f64::from_bits(biased | TWO_52) - (4_503_599_627_370_496.0 + 1023.0);
    let mantissa = bits.wrapping_add(BIAS).wrapping_sub(biased << 52);
    let f = f64::from_bits(mantissa) - 1.0;
    // ln(1 + f) = 2 atanh(s) = f - f²/2 + s (f²/2 + R(s²)); the first omitted term of R is below 3e-17.
    let s = f / (2.0 + f);
    let z = s * s;
    let z2 = z * z;
    let z4 = z2 * z2;
    let r0 = 2.0 / 3.0 + z * (2.0 / 5.0);
    let r2 = 2.0 / 7.0 + z * (2.0 / 9.0);
    let r4 = 2.0 / 11.0 + z * (2.0 / 13.0);
    let r6 = 2.0 / 15.0 + z * (2.0 / 17.0);
    let r8 = 2.0 / 19.0 + z * (2.0 / 21.0);
    let r = (r0 + r2 * z2) + ((r4 + r6 * z2) + r8 * z4) * z4;
    let half_square = 0.5 * f * f;
    k * LN2_HIGH - ((half_square - (s * (half_square + r * z) + k * LN2_LOW)) - f)
}

crate::wide! {
    /// Replaces each number by its natural logarithm, as [`ln`].
    pub fn ln_in_place(values: &mut [f64]) {
        for value in values {
            *value = ln(*value);
        }
    }
}

/// Cosine and sine of `turns` full turns, for |turns| up to 2^40; absolute error below 3e-16.
#[inline(always)]
pub fn cos_sin_turns(turns: f64) -> (f64, f64) {
    let shifted = turns * 4.0 + ROUND;
    let quarter = shifted - ROUND;
    let r = (turns * 4.0 - quarter) * std::f64::consts::FRAC_PI_2;
    let z = r * r;
    let mut s = -1.0 / 1_307_674_368_000.0;
    s = s * z + 1.0 / 6_227_020_800.0;
    s = s * z - 1.0 / 39_916_800.0;
    s = s * z + 1.0 / 362_880.0;
    s = s * z - 1.0 / 5_040.0;
    s = s * z + 1.0 / 120.0;
    s = s * z - 1.0 / 6.0;
    let sine = r + r * z * s;
    let mut c = 1.0 / 20_922_789_888_000.0;
    c = c * z - 1.0 / 87_178_291_200.0;
    c = c * z + 1.0 / 479_001_600.0;
    c = c * z - 1.0 / 3_628_800.0;
    c = c * z + 1.0 / 40_320.0;
    c = c * z - 1.0 / 720.0;
    c = c * z + 1.0 / 24.0;
    c = c * z - 0.5;
    let cosine = 1.0 + z * c;
    // The low two bits of the rounded number are the quadrant.
    let bits = shifted.to_bits();
    let swap = bits & 1 == 1;
    let (a, b) = if swap { (sine, cosine) } else { (cosine, sine) };
    let negative_cosine = ((bits.wrapping_add(1)) & 2) << 62;
    let negative_sine = (bits & 2) << 62;
    (f64::from_bits(a.to_bits() ^ negative_cosine), f64::from_bits(b.to_bits() ^ negative_sine))
}

/// Cosine and sine of a small angle in rad, |angle| up to 0.1; absolute error below 3e-13.
#[inline(always)]
pub fn cos_sin_small(angle: f64) -> (f64, f64) {
    let z = angle * angle;
    let cos = 1.0 - z * (0.5 - z * (1.0 / 24.0 - z * (1.0 / 720.0)));
    let sin = angle * (1.0 - z * (1.0 / 6.0 - z * (1.0 / 120.0 - z * (1.0 / 5040.0))));
    (cos, sin)
}

/// Quantile of the standard normal distribution for 2^-53 <= u < 1.
///
/// M. J. Wichura, Applied Statistics 37 (1988) 477, algorithm AS 241, routine PPND16: relative error below 1e-15 down to
/// u = 1.4e-11; beyond, the second rational is continued, with an error below 2e-9.
#[inline(always)]
pub fn normal_quantile(u: f64) -> f64 {
    let q = u - 0.5;
    let r = 0.180_625 - q * q;
    let a = estrin8(
        &[
            3.387_132_872_796_366_608,
            1.331_416_678_917_843_774_5e2,
            1.971_590_950_306_551_442_7e3,
            1.373_169_376_550_946_112_5e4,
            4.592_195_393_154_987_145_7e4,
            6.726_577_092_700_870_085_3e4,
            3.343_057_558_358_812_810_5e4,
            2.509_080_928_730_122_672_7e3,
        ],
        r,
    );
    let b = estrin8(
        &[
            1.0,
            4.231_333_070_160_091_125_2e1,
            6.871_870_074_920_579_083e2,
            5.394_196_021_424_751_107_7e3,
            2.121_379_430_158_659_586_7e4,
            3.930_789_580_009_271_061e4,
            2.872_908_573_572_194_267_4e4,
            5.226_495_278_852_854_561e3,
        ],
        r,
    );
    let central = q * a / b;

    let tail = if q < 0.0 { u } else { 1.0 - u };
    let t = (-ln(tail)).sqrt() - 1.6;
    let c = estrin8(
        &[
            1.423_437_110_749_683_577_34,
            4.630_337_846_156_545_295_9,
            5.769_497_221_460_691_405_5,
            3.647_848_324_763_204_605_04,
            1.270_458_252_452_368_382_58,
            2.417_807_251_774_506_117_7e-1,
            2.272_384_498_926_918_458_33e-2,
            7.745_450_142_783_414_076_4e-4,
        ],
        t,
    );
    let d = estrin8(
        &[
            1.0,
            2.053_191_626_637_758_821_87,
            1.676_384_830_183_803_849_4,
            6.897_673_349_851_000_045_5e-1,
            1.481_039_764_274_800_745_9e-1,
            1.519_866_656_361_645_719_66e-2,
            5.475_938_084_995_344_946e-4,
            1.050_750_071_644_416_843_24e-9,
        ],
        t,
    );
    let outer = c / d;
    let outer = if q < 0.0 { -outer } else { outer };
    if q.abs() <= 0.425 { central } else { outer }
}

/// A polynomial of degree 7, coefficients rising, by Estrin's scheme: short chains of dependent operations.
#[inline(always)]
fn estrin8(c: &[f64; 8], x: f64) -> f64 {
    let x2 = x * x;
    ((c[0] + c[1] * x) + (c[2] + c[3] * x) * x2) + ((c[4] + c[5] * x) + (c[6] + c[7] * x) * x2) * (x2 * x2)
}

/// `base` to the power `exponent` for positive normal numbers, relative error below 1e-10 (1 + |exponent|); 0 where the
/// result is below e^-700.
///
/// For responses and their tails, of which more is not needed.
#[inline(always)]
pub fn power_brief(base: f64, exponent: f64) -> f64 {
    const OFFSET: u64 = 0x3fe6_a09e_667f_3bcd;
    const BIAS: u64 = 1023 << 52;
    const TWO_52: u64 = 0x4330_0000_0000_0000;
    let bits = base.to_bits();
    let biased = (bits.wrapping_sub(OFFSET).wrapping_add(BIAS)) >> 52;
    let k = f64::from_bits(biased | TWO_52) - (4_503_599_627_370_496.0 + 1023.0);
    let f = f64::from_bits(bits.wrapping_add(BIAS).wrapping_sub(biased << 52)) - 1.0;
    let s = f / (2.0 + f);
    let z = s * s;
    let z2 = z * z;
    let series = (2.0 + z * (2.0 / 3.0)) + ((2.0 / 5.0 + z * (2.0 / 7.0)) + (2.0 / 9.0 + z * (2.0 / 11.0)) * z2) * z2;
    let y = exponent * (k * std::f64::consts::LN_2 + s * series);
    let y = if y > -700.0 { y } else { -700.0 };
    let shifted = y * std::f64::consts::LOG2_E + ROUND;
    let r = y - (shifted - ROUND) * std::f64::consts::LN_2;
    let r2 = r * r;
    let r4 = r2 * r2;
    let p = (1.0 + r)
        + (0.5 + r * (1.0 / 6.0)) * r2
        + ((1.0 / 24.0 + r * (1.0 / 120.0))
            + (1.0 / 720.0 + r * (1.0 / 5_040.0)) * r2
            + (1.0 / 40_320.0 + r * (1.0 / 362_880.0)) * r4)
            * r4;
    p * f64::from_bits((shifted.to_bits() << 52).wrapping_add(1.0_f64.to_bits()))
}
