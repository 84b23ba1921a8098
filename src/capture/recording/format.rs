//! Number formats of a recording's samples, and how their bytes become samples of full scale 1.
//!
//! Names and meaning: SigMF specification, `core:datatype`. The scale is the program's own: the
//! negative end of an integer format is -1, so that 0 dBFS is the same in every format.

use num_complex::Complex32;

/// A number format that can be read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum SampleFormat {
    /// Pairs of signed 16-bit integers, little-endian; 32768 is full scale.
    Ci16Le,
    /// Pairs of signed 8-bit integers; 128 is full scale.
    Ci8,
    /// Pairs of unsigned 8-bit integers, zero at 128; 128 steps are full scale.
    Cu8,
    /// Pairs of 32-bit floats, little-endian; 1 is full scale.
    Cf32Le,
}

/// What can be read, for messages.
const READABLE: &str = "readable are ci16_le, ci8, cu8, cf32_le";

impl SampleFormat {
    /// The format that a `core:datatype` names.
    ///
    /// # Errors
    /// What is wrong with the word, and which words are readable.
    pub(super) fn parse(word: &str) -> Result<SampleFormat, String> {
        match word {
            "ci16_le" => Ok(SampleFormat::Ci16Le),
            "ci8" => Ok(SampleFormat::Ci8),
            "cu8" => Ok(SampleFormat::Cu8),
            "cf32_le" => Ok(SampleFormat::Cf32Le),
            _ if is_sigmf_datatype(word) => Err(format!("{word} is not supported; {READABLE}")),
            _ => Err(format!("{word:.40?} is not a SigMF datatype; {READABLE}")),
        }
    }

    /// Size of one complex sample (bytes).
    pub(super) fn bytes_per_sample(self) -> usize {
        match self {
            SampleFormat::Ci16Le => 4,
            SampleFormat::Ci8 | SampleFormat::Cu8 => 2,
            SampleFormat::Cf32Le => 8,
        }
    }

    /// Appends the samples that `bytes` (a whole number of samples) hold; returns how many of them
    /// had a component at the rail. A float is at the rail from 1 on; NaN is not, and passes.
    pub(super) fn decode(self, bytes: &[u8], samples: &mut Vec<Complex32>) -> usize {
        match self {
            SampleFormat::Ci16Le => decode_pairs(bytes, samples, |component| {
                let value = i16::from_le_bytes(component);
                (f32::from(value) / 32768.0, value == i16::MIN || value == i16::MAX)
            }),
            SampleFormat::Ci8 => decode_pairs(bytes, samples, |component| {
                let value = i8::from_le_bytes(component);
                (f32::from(value) / 128.0, value == i8::MIN || value == i8::MAX)
            }),
            SampleFormat::Cu8 => decode_pairs(bytes, samples, |[value]| {
                ((f32::from(value) - 128.0) / 128.0, value == u8::MIN || value == u8::MAX)
            }),
            SampleFormat::Cf32Le => decode_pairs(bytes, samples, |component| {
                let value = f32::from_le_bytes(component);
                (value, value.abs() >= 1.0)
            }),
        }
    }
}

/// Appends pairs of `N`-byte components; `component` tells a component's value and whether it
/// stands at the rail. Returns the number of samples with a component there.
fn decode_pairs<const N: usize>(
    bytes: &[u8],
    samples: &mut Vec<Complex32>,
    component: impl Fn([u8; N]) -> (f32, bool),
) -> usize {
    let (components, rest) = bytes.as_chunks::<N>();
    let (pairs, odd) = components.as_chunks::<2>();
    assert!(rest.is_empty() && odd.is_empty(), "bytes must be a whole number of samples");
    let mut clipped = 0;
    samples.extend(pairs.iter().map(|[i, q]| {
        let ((i, i_clipped), (q, q_clipped)) = (component(*i), component(*q));
        clipped += usize::from(i_clipped || q_clipped);
        Complex32::new(i, q)
    }));
    clipped
}

/// Whether SigMF knows the word: `c` or `r`, a number type, and the byte order unless it is 8 bits.
fn is_sigmf_datatype(word: &str) -> bool {
    let Some(number) = word.strip_prefix(['c', 'r']) else { return false };
    let ordered = number.strip_suffix("_le").or_else(|| number.strip_suffix("_be"));
    match ordered {
        Some(number) => matches!(number, "f32" | "f64" | "i32" | "i16" | "u32" | "u16"),
        None => matches!(number, "i8" | "u8"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn decoded(format: SampleFormat, bytes: &[u8]) -> (Vec<(f32, f32)>, usize) {
        let mut samples = Vec::new();
        let clipped = format.decode(bytes, &mut samples);
        (samples.iter().map(|sample| (sample.re, sample.im)).collect(), clipped)
    }

    #[test]
    fn integers_are_scaled_to_full_scale_one_and_rails_are_counted_per_sample() {
        let bytes = [0x00, 0x40, 0x00, 0xc0, 0xff, 0x7f, 0x00, 0x80, 0x01, 0x80, 0xfe, 0x7f];
        let expected = vec![
            (0.5, -0.5),
            (32767.0 / 32768.0, -1.0), // Both at the rail: one clipped sample.
            (-32767.0 / 32768.0, 32766.0 / 32768.0),
        ];
        assert_eq!(decoded(SampleFormat::Ci16Le, &bytes), (expected, 1));

        let expected = vec![(0.5, -1.0), (127.0 / 128.0, 0.0), (-127.0 / 128.0, 126.0 / 128.0)];
        let bytes = [0x40, 0x80, 0x7f, 0x00, 0x81, 0x7e];
        assert_eq!(decoded(SampleFormat::Ci8, &bytes), (expected, 2));

        let expected = vec![(0.0, -1.0), (127.0 / 128.0, 0.5), (-127.0 / 128.0, 126.0 / 128.0)];
        let bytes = [128, 0, 255, 192, 1, 254];
        assert_eq!(decoded(SampleFormat::Cu8, &bytes), (expected, 2));
    }

    #[test]
    fn floats_pass_unchanged_and_count_as_clipped_from_one_on() {
        let values = [0.25_f32, -0.999, 1.0, 0.0, 0.0, -1.5, f32::INFINITY, 0.0, f32::NAN, 0.5];
        let bytes: Vec<u8> = values.iter().flat_map(|value| value.to_le_bytes()).collect();
        let (samples, clipped) = decoded(SampleFormat::Cf32Le, &bytes);
        assert_eq!(samples[..3], [(0.25, -0.999), (1.0, 0.0), (0.0, -1.5)]);
        assert_eq!(samples[3], (f32::INFINITY, 0.0));
        assert!(samples[4].0.is_nan() && samples[4].1 == 0.5);
        assert_eq!(clipped, 3);
    }

    #[test]
    fn every_sigmf_datatype_is_either_read_or_refused_as_not_supported() {
        // The grammar of SigMF's core:datatype, from memory: 2 * (6 * 2 + 2) = 28 words.
        let mut words = Vec::new();
        for kind in ["c", "r"] {
            for number in ["f32", "f64", "i32", "i16", "u32", "u16"] {
                words.extend(["le", "be"].map(|order| format!("{kind}{number}_{order}")));
            }
            words.extend(["i8", "u8"].map(|number| format!("{kind}{number}")));
        }
        assert_eq!(words.len(), 28);
        let refused: Vec<String> =
            words.iter().filter_map(|word| SampleFormat::parse(word).err()).collect();
        assert_eq!(refused.len(), 24);
        assert!(refused.iter().all(|line| line.contains("is not supported; readable are ci16_le")));
    }

    #[test]
    fn words_that_sigmf_does_not_know_are_told_apart() {
        for word in ["", "ci16", "ci8_le", "cf64", "CI16_LE", "ci16_le ", "i16_le", "cf16_le"] {
            let line = SampleFormat::parse(word).expect_err("not a datatype");
            assert!(line.contains("is not a SigMF datatype"), "{line}");
        }
    }
}
