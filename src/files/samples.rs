//! Stored numbers of any type, and how they become heights.

use super::format::{HeightScale, malformed};
use crate::error::Result;

/// The type of the stored numbers, under NumPy's names.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum SampleType {
    Uint8,
    Int8,
    Uint16,
    Int16,
    Uint32,
    Int32,
    Uint64,
    Int64,
    Float16,
    Float32,
    Float64,
}

impl SampleType {
    /// NumPy's name.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Uint8 => "uint8",
            Self::Int8 => "int8",
            Self::Uint16 => "uint16",
            Self::Int16 => "int16",
            Self::Uint32 => "uint32",
            Self::Int32 => "int32",
            Self::Uint64 => "uint64",
            Self::Int64 => "int64",
            Self::Float16 => "float16",
            Self::Float32 => "float32",
            Self::Float64 => "float64",
        }
    }

    /// Bytes of one number.
    pub const fn bytes(self) -> usize {
        match self {
            Self::Uint8 | Self::Int8 => 1,
            Self::Uint16 | Self::Int16 | Self::Float16 => 2,
            Self::Uint32 | Self::Int32 | Self::Float32 => 4,
            Self::Uint64 | Self::Int64 | Self::Float64 => 8,
        }
    }

    /// Whether it counts rather than measures.
    pub const fn is_integer(self) -> bool {
        !matches!(self, Self::Float16 | Self::Float32 | Self::Float64)
    }
}

/// Byte order of stored numbers.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Endian {
    Little,
    Big,
}

/// Stored numbers, row by row. Half floats are widened when read.
#[derive(Debug, Clone, PartialEq)]
pub enum Samples {
    U8(Vec<u8>),
    I8(Vec<i8>),
    U16(Vec<u16>),
    I16(Vec<i16>),
    U32(Vec<u32>),
    I32(Vec<i32>),
    U64(Vec<u64>),
    I64(Vec<i64>),
    F32(Vec<f32>),
    F64(Vec<f64>),
}

/// The same expression for the numbers of whatever type.
macro_rules! each {
    ($samples:expr, $values:ident => $body:expr) => {
        match $samples {
            Samples::U8($values) => $body,
            Samples::I8($values) => $body,
            Samples::U16($values) => $body,
            Samples::I16($values) => $body,
            Samples::U32($values) => $body,
            Samples::I32($values) => $body,
            Samples::U64($values) => $body,
            Samples::I64($values) => $body,
            Samples::F32($values) => $body,
            Samples::F64($values) => $body,
        }
    };
}

/// A stored number as `f64`. Only 64-bit integers beyond 2^53 are rounded.
trait Number: Copy {
    fn to_f64(self) -> f64;
    /// Whether it is the file's void value, compared in its own precision.
    fn is_void(self, void: f64) -> bool {
        self.to_f64() == void
    }
}

macro_rules! numbers {
    ($($t:ty),*) => { $(impl Number for $t {
        fn to_f64(self) -> f64 { self as f64 }
    })* };
}
numbers!(u8, i8, u16, i16, u32, i32, u64, i64, f64);

impl Number for f32 {
    fn to_f64(self) -> f64 {
        f64::from(self)
    }
    fn is_void(self, void: f64) -> bool {
        self == void as f32
    }
}

/// Lowest and highest stored number that is no void, and the number of voids.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RawStatistics {
    pub range: Option<(f64, f64)>,
    pub voids: usize,
}

impl Samples {
    /// Numbers from bytes. Errors: `Malformed` when the bytes are no whole number of them.
    pub fn from_bytes(kind: SampleType, endian: Endian, bytes: &[u8]) -> Result<Self> {
        if !bytes.len().is_multiple_of(kind.bytes()) {
            return Err(malformed(format!(
                "{} bytes are no whole number of {} samples",
                bytes.len(),
                kind.name()
            )));
        }
        macro_rules! parse {
            ($variant:ident, $t:ty) => {
                Self::$variant(numbers_from(
                    bytes,
                    endian,
                    <$t>::from_le_bytes,
                    <$t>::from_be_bytes,
                ))
            };
        }
        Ok(match kind {
            SampleType::Uint8 => parse!(U8, u8),
            SampleType::Int8 => parse!(I8, i8),
            SampleType::Uint16 => parse!(U16, u16),
            SampleType::Int16 => parse!(I16, i16),
            SampleType::Uint32 => parse!(U32, u32),
            SampleType::Int32 => parse!(I32, i32),
            SampleType::Uint64 => parse!(U64, u64),
            SampleType::Int64 => parse!(I64, i64),
            SampleType::Float16 => Self::F32(numbers_from(
                bytes,
                endian,
                |b| half::f16::from_le_bytes(b).to_f32(),
                |b| half::f16::from_be_bytes(b).to_f32(),
            )),
            SampleType::Float32 => parse!(F32, f32),
            SampleType::Float64 => parse!(F64, f64),
        })
    }

    /// How many numbers there are.
    pub fn len(&self) -> usize {
        each!(self, v => v.len())
    }

    /// The numbers in C order of an array of `rows` x `columns` stored column by column.
    #[must_use]
    pub fn turned_from_fortran(self, rows: usize, columns: usize) -> Self {
        fn turn<T: Copy>(values: &[T], rows: usize, columns: usize) -> Vec<T> {
            let mut turned = Vec::with_capacity(values.len());
            for row in 0..rows {
                turned.extend((0..columns).map(|column| values[column * rows + row]));
            }
            turned
        }
        if self.len() != rows * columns {
            return self;
        }
        match self {
            Self::U8(v) => Self::U8(turn(&v, rows, columns)),
            Self::I8(v) => Self::I8(turn(&v, rows, columns)),
            Self::U16(v) => Self::U16(turn(&v, rows, columns)),
            Self::I16(v) => Self::I16(turn(&v, rows, columns)),
            Self::U32(v) => Self::U32(turn(&v, rows, columns)),
            Self::I32(v) => Self::I32(turn(&v, rows, columns)),
            Self::U64(v) => Self::U64(turn(&v, rows, columns)),
            Self::I64(v) => Self::I64(turn(&v, rows, columns)),
            Self::F32(v) => Self::F32(turn(&v, rows, columns)),
            Self::F64(v) => Self::F64(turn(&v, rows, columns)),
        }
    }

    /// Range over the finite, non-void numbers, and the count of the others.
    pub fn statistics(&self, void: Option<f64>) -> RawStatistics {
        fn of<T: Number>(values: &[T], void: Option<f64>) -> RawStatistics {
            let (mut low, mut high) = (f64::INFINITY, f64::NEG_INFINITY);
            let mut voids = 0;
            for &value in values {
                let z = value.to_f64();
                if !z.is_finite() || void.is_some_and(|v| value.is_void(v)) {
                    voids += 1;
                } else {
                    low = low.min(z);
                    high = high.max(z);
                }
            }
            RawStatistics {
                range: (low <= high).then_some((low, high)),
                voids,
            }
        }
        each!(self, v => of(v, void))
    }

    /// The stored numbers as `f64`, without any scale.
    pub fn to_f64(&self) -> Vec<f64> {
        each!(self, v => v.iter().map(|x| x.to_f64()).collect())
    }

    /// Heights in nm, voids as NaN, and a sentence for the history where a constant had to be
    /// taken off.
    ///
    /// A scan can sit on a large constant (the stage's height), where single precision no longer
    /// resolves the topography. Where it would round by more than 0.01 nm and by more than a
    /// ten-thousandth of the range, the lowest height is subtracted first; this is said.
    pub fn into_heights(
        self,
        scale: &HeightScale,
        void: Option<f64>,
    ) -> (Vec<f32>, Option<String>) {
        let nm = |z: f64| z * scale.nm_per_count + scale.offset_nm;
        let lowest = match &self {
            // Single precision has lost it already, and short integers never had it.
            Self::F32(_) | Self::U8(_) | Self::I8(_) | Self::U16(_) | Self::I16(_) => None,
            other => other.statistics(void).range,
        }
        .map(|(a, b)| (nm(a).min(nm(b)), nm(a).max(nm(b))))
        .filter(|&(low, high)| {
            let rounding = low.abs().max(high.abs()) * f64::from(f32::EPSILON) / 2.0;
            high > low && rounding > 0.01 && rounding > 1e-4 * (high - low)
        })
        .map(|(low, _)| low);
        let step = lowest.map(|low| {
            format!(
                "Took the constant {low} nm off all heights: single precision does not resolve the topography upon it."
            )
        });
        (self.scaled(scale, void, lowest.unwrap_or(0.0)), step)
    }

    /// Heights in nm, voids as NaN, less the constant `base` (nm). Infinities stay.
    pub fn scaled(self, scale: &HeightScale, void: Option<f64>, base: f64) -> Vec<f32> {
        fn of<T: Number>(values: Vec<T>, void: Option<f64>, nm: impl Fn(f64) -> f64) -> Vec<f32> {
            values
                .into_iter()
                .map(|value| match void {
                    Some(v) if value.is_void(v) => f32::NAN,
                    _ => nm(value.to_f64()) as f32,
                })
                .collect()
        }
        let offset = scale.offset_nm - base;
        let identity = scale.nm_per_count == 1.0 && offset == 0.0;
        let samples = match self {
            // Single-precision nanometres are taken in place and to the bit.
            Self::F32(mut values) if identity => {
                if let Some(void) = void {
                    for value in values.iter_mut().filter(|v| v.is_void(void)) {
                        *value = f32::NAN;
                    }
                }
                return values;
            }
            other => other,
        };
        each!(samples, v => of(v, void, |z| z * scale.nm_per_count + offset))
    }
}

fn numbers_from<T, const N: usize>(
    bytes: &[u8],
    endian: Endian,
    little: impl Fn([u8; N]) -> T,
    big: impl Fn([u8; N]) -> T,
) -> Vec<T> {
    let chunks = bytes.as_chunks::<N>().0.iter();
    match endian {
        Endian::Little => chunks.map(|&chunk| little(chunk)).collect(),
        Endian::Big => chunks.map(|&chunk| big(chunk)).collect(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn scale(nm_per_count: f64, offset_nm: f64) -> HeightScale {
        HeightScale {
            unit: "nm".into(),
            nm_per_count,
            offset_nm,
        }
    }

    #[test]
    fn bytes_of_both_orders() {
        let bytes = [1, 0, 0xff, 0xfe];
        let read = |kind, endian| Samples::from_bytes(kind, endian, &bytes).unwrap();
        assert_eq!(
            read(SampleType::Uint16, Endian::Little),
            Samples::U16(vec![1, 0xfeff])
        );
        assert_eq!(
            read(SampleType::Int16, Endian::Big),
            Samples::I16(vec![256, -2])
        );
        // IEEE 754 binary16: 0x3c00 is 1, 0xc000 is -2.
        let half = Samples::from_bytes(SampleType::Float16, Endian::Big, &[0x3c, 0, 0xc0, 0]);
        assert_eq!(half.unwrap(), Samples::F32(vec![1.0, -2.0]));
        assert!(Samples::from_bytes(SampleType::Float32, Endian::Big, &[0; 5]).is_err());
    }

    #[test]
    fn fortran_order_is_turned() {
        let samples = Samples::U8(vec![1, 4, 2, 5, 3, 6]).turned_from_fortran(2, 3);
        assert_eq!(samples, Samples::U8(vec![1, 2, 3, 4, 5, 6]));
    }

    #[test]
    fn counts_become_heights_and_the_void_value_nan() {
        let (heights, step) =
            Samples::U16(vec![0, 1, 100]).into_heights(&scale(0.5, -2.0), Some(0.0));
        assert!(heights[0].is_nan());
        assert_eq!(&heights[1..], [-1.5, 48.0]);
        assert_eq!(step, None);
    }

    #[test]
    fn the_void_value_of_floats_is_compared_in_their_precision() {
        // A nodata text of more digits than the file's float32 holds.
        let void = f64::from(-3.4e38_f32) * (1.0 + 1e-9);
        let samples = Samples::F32(vec![-3.4e38, 2.0]);
        assert_eq!(
            samples.statistics(Some(void)),
            RawStatistics {
                range: Some((2.0, 2.0)),
                voids: 1
            }
        );
        let (heights, _) = samples.into_heights(&scale(1.0, 0.0), Some(void));
        assert!(heights[0].is_nan() && heights[1] == 2.0);
    }

    #[test]
    fn a_large_constant_does_not_swallow_the_topography() {
        let counts: Vec<f64> = (0..5).map(|i| 7e-3 + 1e-9 * f64::from(i)).collect();
        let (heights, step) = Samples::F64(counts).into_heights(&scale(1e9, 0.0), None);
        for (i, z) in heights.iter().enumerate() {
            // 7e6 nm in double precision resolves about 1e-9 nm.
            assert!((f64::from(*z) - i as f64).abs() < 1e-6, "{z}");
        }
        assert!(step.unwrap().contains("7000000"));
        let (heights, step) =
            Samples::F64(vec![1000.0, 1000.05]).into_heights(&scale(1.0, 0.0), None);
        assert_eq!(heights, [1000.0, 1000.05]);
        assert_eq!(step, None);
    }

    #[test]
    fn nothing_but_voids_has_no_range() {
        let all_void = Samples::F64(vec![f64::NAN, f64::INFINITY]).statistics(None);
        assert_eq!(
            all_void,
            RawStatistics {
                range: None,
                voids: 2
            }
        );
        assert_eq!(Samples::U8(vec![]).statistics(None).range, None);
    }
}
