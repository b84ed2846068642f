//! Seeded random damage of a text.

/// Splitmix64 (G. L. Steele, D. Lea, C. H. Flood, OOPSLA 2014): small, and the same on every machine.
pub struct Random(pub u64);

impl Random {
    pub fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e3779b97f4a7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58476d1ce4e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d049bb133111eb);
        z ^ (z >> 31)
    }

    pub fn below(&mut self, n: usize) -> usize {
        (self.next() % n.max(1) as u64) as usize
    }
}

fn edit_number(text: &mut Vec<u8>, random: &mut Random, separates: fn(u8) -> bool) {
    let starts: Vec<usize> = (1..text.len()).filter(|i| separates(text[i - 1]) && !separates(text[*i])).collect();
    if starts.is_empty() {
        return;
    }
    let start = starts[random.below(starts.len())];
    let end = start + text[start..].iter().position(|byte| separates(*byte)).unwrap_or(text.len() - start);
    let old = String::from_utf8_lossy(&text[start..end]).into_owned();
    let value = old.parse::<f64>().unwrap_or(1.0);
    let new = match random.below(14) {
        0 => format!("{:e}", -value),
        1 => format!("{:.10e}", value * 1.05),
        2 => format!("{:.7e}", value * (1.0 + 1e-5)),
        3 => "NaN".to_owned(),
        4 => "inf".to_owned(),
        5 => "0".to_owned(),
        6 => format!("{}", random.below(12)),
        7 => "1e400".to_owned(),
        8 => "-1e300".to_owned(),
        9 => String::new(),
        10 => format!("{old} {old}"),
        11 => format!("{:.0}", value),
        12 => old.replace(['e', 'E'], "D"),
        _ => format!("{:e}", value + 1.0),
    };
    text.splice(start..end, new.into_bytes());
}

/// Damages a text; numbers stand between bytes that separate.
pub fn mutate(text: &mut Vec<u8>, random: &mut Random, separates: fn(u8) -> bool) {
    let lines = |text: &[u8]| -> Vec<Vec<u8>> { text.split_inclusive(|b| *b == b'\n').map(<[u8]>::to_vec).collect() };
    match random.below(8) {
        0 => {
            let at = random.below(text.len());
            text[at] ^= 1 << random.below(8);
        }
        1 => text.truncate(random.below(text.len())),
        2 => {
            let from = random.below(text.len());
            let to = (from + random.below(200)).min(text.len());
            text.drain(from..to);
        }
        3 => {
            let mut lines = lines(text);
            let (from, to) = (random.below(lines.len()), random.below(lines.len()));
            let copy = lines[from].clone();
            lines.insert(to, copy);
            *text = lines.concat();
        }
        4 => {
            let mut lines = lines(text);
            let (a, b) = (random.below(lines.len()), random.below(lines.len()));
            lines.swap(a, b);
            *text = lines.concat();
        }
        5 => {
            let mut lines = lines(text);
            lines.remove(random.below(lines.len()));
            *text = lines.concat();
        }
        _ => edit_number(text, random, separates),
    }
}
