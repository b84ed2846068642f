//! Scrambled Sobol points: any number of them, with 52 bits, in up to 64 dimensions.
//!
//! Direction numbers: S. Joe and F. Y. Kuo, SIAM J. Sci. Comput. 30 (2008) 2635, the set with good two-dimensional
//! projections (first 64 dimensions). Scrambling: a random lower-triangular matrix per dimension (J. Matousek,
//! J. Complexity 14 (1998) 527) and a random digital shift; the mean over points is then unbiased and its variance is that
//! of nested uniform scrambling (A. B. Owen, ACM TOMACS 13 (2003) 363).

/// Largest number of dimensions.
pub const MAX_DIMENSIONS: usize = 64;

/// Largest number of points of one scrambling.
pub const MAX_POINTS: u64 = 1 << 32;

/// Number of consecutive points that are made at once.
pub const BLOCK: usize = 64;

/// One value per point of a block.
pub type Lane = [f64; BLOCK];

const BITS: usize = 52;
const COLUMNS: usize = 32;
const BLOCK_BITS: usize = BLOCK.trailing_zeros() as usize;

/// Primitive polynomial (binary coefficients) and initial numbers of dimensions 2, 3, …; dimension 1 is the van der
/// Corput sequence.
#[rustfmt::skip]
const JOE_KUO: [(u32, &[u32]); MAX_DIMENSIONS - 1] = [
    (0b11, &[1]),
    (0b111, &[1, 3]),
    (0b1011, &[1, 3, 1]),
    (0b1101, &[1, 1, 1]),
    (0b10011, &[1, 1, 3, 3]),
    (0b11001, &[1, 3, 5, 13]),
    (0b100101, &[1, 1, 5, 5, 17]),
    (0b101001, &[1, 1, 5, 5, 5]),
    (0b101111, &[1, 1, 7, 11, 19]),
    (0b110111, &[1, 1, 5, 1, 1]),
    (0b111011, &[1, 1, 1, 3, 11]),
    (0b111101, &[1, 3, 5, 5, 31]),
    (0b1000011, &[1, 3, 3, 9, 7, 49]),
    (0b1011011, &[1, 1, 1, 15, 21, 21]),
    (0b1100001, &[1, 3, 1, 13, 27, 49]),
    (0b1100111, &[1, 1, 1, 15, 7, 5]),
    (0b1101101, &[1, 3, 1, 15, 13, 25]),
    (0b1110011, &[1, 1, 5, 5, 19, 61]),
    (0b10000011, &[1, 3, 7, 11, 23, 15, 103]),
    (0b10001001, &[1, 3, 7, 13, 13, 15, 69]),
    (0b10001111, &[1, 1, 3, 13, 7, 35, 63]),
    (0b10010001, &[1, 3, 5, 9, 1, 25, 53]),
    (0b10011101, &[1, 3, 1, 13, 9, 35, 107]),
    (0b10100111, &[1, 3, 1, 5, 27, 61, 31]),
    (0b10101011, &[1, 1, 5, 11, 19, 41, 61]),
    (0b10111001, &[1, 3, 5, 3, 3, 13, 69]),
    (0b10111111, &[1, 1, 7, 13, 1, 19, 1]),
    (0b11000001, &[1, 3, 7, 5, 13, 19, 59]),
    (0b11001011, &[1, 1, 3, 9, 25, 29, 41]),
    (0b11010011, &[1, 3, 5, 13, 23, 1, 55]),
    (0b11010101, &[1, 3, 7, 3, 13, 59, 17]),
    (0b11100101, &[1, 3, 1, 3, 5, 53, 69]),
    (0b11101111, &[1, 1, 5, 5, 23, 33, 13]),
    (0b11110001, &[1, 1, 7, 7, 1, 61, 123]),
    (0b11110111, &[1, 1, 7, 9, 13, 61, 49]),
    (0b11111101, &[1, 3, 3, 5, 3, 55, 33]),
    (0b100011101, &[1, 3, 1, 15, 31, 13, 49, 245]),
    (0b100101011, &[1, 3, 5, 15, 31, 59, 63, 97]),
    (0b100101101, &[1, 3, 1, 11, 11, 11, 77, 249]),
    (0b101001101, &[1, 3, 1, 11, 27, 43, 71, 9]),
    (0b101011111, &[1, 1, 7, 15, 21, 11, 81, 45]),
    (0b101100011, &[1, 3, 7, 3, 25, 31, 65, 79]),
    (0b101100101, &[1, 3, 1, 1, 19, 11, 3, 205]),
    (0b101101001, &[1, 1, 5, 9, 19, 21, 29, 157]),
    (0b101110001, &[1, 3, 7, 11, 1, 33, 89, 185]),
    (0b110000111, &[1, 3, 3, 3, 15, 9, 79, 71]),
    (0b110001101, &[1, 3, 7, 11, 15, 39, 119, 27]),
    (0b110101001, &[1, 1, 3, 1, 11, 31, 97, 225]),
    (0b111000011, &[1, 1, 1, 3, 23, 43, 57, 177]),
    (0b111001111, &[1, 3, 7, 7, 17, 17, 37, 71]),
    (0b111100111, &[1, 3, 1, 5, 27, 63, 123, 213]),
    (0b111110101, &[1, 1, 3, 5, 11, 43, 53, 133]),
    (0b1000010001, &[1, 3, 5, 5, 29, 17, 47, 173, 479]),
    (0b1000011011, &[1, 3, 3, 11, 3, 1, 109, 9, 69]),
    (0b1000100001, &[1, 1, 1, 5, 17, 39, 23, 5, 343]),
    (0b1000101101, &[1, 3, 1, 5, 25, 15, 31, 103, 499]),
    (0b1000110011, &[1, 1, 1, 11, 11, 17, 63, 105, 183]),
    (0b1001011001, &[1, 1, 5, 11, 9, 29, 97, 231, 363]),
    (0b1001011111, &[1, 1, 5, 15, 19, 45, 41, 7, 383]),
    (0b1001101001, &[1, 3, 7, 7, 31, 19, 83, 137, 221]),
    (0b1001101111, &[1, 1, 1, 3, 23, 15, 111, 223, 83]),
    (0b1001110111, &[1, 1, 5, 13, 31, 15, 55, 25, 161]),
    (0b1001111101, &[1, 1, 3, 13, 25, 47, 39, 87, 257]),
];

/// A deterministic 64-bit mixer (G. L. Steele, D. Lea, C. H. Flood, OOPSLA 2014): independent streams from a key.
#[derive(Clone, Debug)]
struct Mixer(u64);

impl Mixer {
    fn keyed(seed: u64, replicate: u64, dimension: u64) -> Self {
        let mut mixer = Mixer(seed);
        let a = mixer.next() ^ replicate.wrapping_mul(0xd134_2543_de82_ef95);
        mixer = Mixer(a);
        let b = mixer.next() ^ dimension.wrapping_mul(0xaf25_1af3_b0f0_25b5);
        Mixer(b)
    }

    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }
}

/// One dimension of one scrambling.
#[derive(Clone, Debug)]
struct Dimension {
    columns: [u64; COLUMNS],
    /// Point `i` of an aligned block is the block's first point xor `within[i]`.
    within: [u64; BLOCK],
    shift: u64,
}

/// One independent scrambling of the sequence.
#[derive(Clone, Debug)]
pub struct Scrambling {
    dimensions: Vec<Dimension>,
}

impl Scrambling {
    /// The scrambling of number `replicate` of a seed. Dimension `d` of the result is dimension `places[d]` of the
    /// sequence: the first ones are the most even. `None` where a place is not below [`MAX_DIMENSIONS`].
    pub fn new(seed: u64, replicate: u64, places: &[usize]) -> Option<Self> {
        let make = |place: &usize| {
            (*place < MAX_DIMENSIONS).then(|| Dimension::new(*place, Mixer::keyed(seed, replicate, *place as u64)))
        };
        Some(Scrambling { dimensions: places.iter().map(make).collect::<Option<_>>()? })
    }

    /// Number of dimensions.
    pub fn dimensions(&self) -> usize {
        self.dimensions.len()
    }

    /// Fills one lane with coordinate `dimension` of the points `first..first + BLOCK`; `first` must be a multiple of
    /// [`BLOCK`] and points beyond [`MAX_POINTS`] repeat. Values lie strictly between 0 and 1.
    #[inline]
    pub fn fill(&self, dimension: usize, first: u64, lane: &mut Lane) {
        let d = &self.dimensions[dimension];
        let mut base = d.shift;
        let mut rest = first >> BLOCK_BITS;
        let mut column = BLOCK_BITS;
        while rest != 0 && column < COLUMNS {
            if rest & 1 == 1 {
                base ^= d.columns[column];
            }
            rest >>= 1;
            column += 1;
        }
        spread(base, &d.within, lane);
    }
}

wide! {
    fn spread(base: u64, within: &[u64; BLOCK], lane: &mut Lane) {
        const ONE: u64 = 0x3ff0_0000_0000_0000;
        const HALF_STEP: f64 = 1.110_223_024_625_156_5e-16; // 2^-53
        for (value, offset) in lane.iter_mut().zip(within) {
            *value = (f64::from_bits((base ^ offset) | ONE) - 1.0) + HALF_STEP;
        }
    }
}

impl Dimension {
    fn new(index: usize, mut mixer: Mixer) -> Self {
        let plain = direction_numbers(index);
        // Column j of the scrambling matrix: digit j itself and random digits below it.
        let matrix: [u64; BITS] = std::array::from_fn(|j| {
            let digit = 1_u64 << (BITS - 1 - j);
            digit | (mixer.next() & (digit - 1))
        });
        let columns = plain.map(|number| {
            let (mut rest, mut sum) = (number, 0);
            while rest != 0 {
                sum ^= matrix[rest.leading_zeros() as usize];
                rest &= !(1 << (COLUMNS - 1) >> rest.leading_zeros());
            }
            sum
        });
        let shift = mixer.next() >> (64 - BITS);
        let mut within = [0; BLOCK];
        for i in 1..BLOCK {
            // One column more than the point without the last bit of its number.
            within[i] = within[i & (i - 1)] ^ columns[i.trailing_zeros() as usize];
        }
        Dimension { columns, within, shift }
    }
}

/// Direction numbers of a dimension as 32-bit fractions.
fn direction_numbers(index: usize) -> [u32; COLUMNS] {
    let mut numbers = [0_u32; COLUMNS];
    if index == 0 {
        for (k, number) in numbers.iter_mut().enumerate() {
            *number = 1 << (COLUMNS - 1 - k);
        }
        return numbers;
    }
    let (polynomial, initial) = JOE_KUO[index - 1];
    let degree = initial.len();
    for k in 0..COLUMNS {
        if k < degree {
            numbers[k] = initial[k] << (COLUMNS - 1 - k);
        } else {
            let mut number = numbers[k - degree] ^ (numbers[k - degree] >> degree);
            for j in 1..degree {
                if polynomial >> (degree - j) & 1 == 1 {
                    number ^= numbers[k - j];
                }
            }
            numbers[k] = number;
        }
    }
    numbers
}
