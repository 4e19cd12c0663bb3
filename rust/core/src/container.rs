//! Packed arrays with a text beside them, in the safetensors layout.
//!
//! Layout: eight bytes of header length, a JSON header (shapes, types and byte ranges, and a map of texts of which
//! only the key "drumlin" is used), then the numbers, little endian, without holes. The bytes depend on nothing but
//! the content. Reading trusts nothing: every length and range is checked before it is used.

use crate::error::{Error, Result};
use safetensors::tensor::{Dtype, SafeTensorError, SafeTensors, TensorView, serialize};
use std::collections::HashMap;

/// The one key of the map of texts.
const KEY: &str = "drumlin";
/// The name that the layout keeps for the map of texts.
const RESERVED: &str = "__metadata__";
/// Longest number in a header: a size of more digits cannot be meant.
const DIGITS: usize = 15;

/// The numbers of one array.
#[derive(Clone, Debug, PartialEq)]
pub enum TensorData {
    /// 64-bit floats.
    F64(Vec<f64>),
    /// 64-bit signed integers.
    I64(Vec<i64>),
    /// 32-bit signed integers.
    I32(Vec<i32>),
    /// 64-bit unsigned integers.
    U64(Vec<u64>),
}

/// One array, last axis fastest.
#[derive(Clone, Debug, PartialEq)]
pub struct Tensor {
    /// Length of each axis.
    pub shape: Vec<usize>,
    /// The numbers, as many as the product of `shape`.
    pub data: TensorData,
}

impl TensorData {
    /// How many numbers there are.
    pub fn len(&self) -> usize {
        match self {
            Self::F64(v) => v.len(),
            Self::I64(v) => v.len(),
            Self::I32(v) => v.len(),
            Self::U64(v) => v.len(),
        }
    }

    /// Whether there are no numbers.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    fn dtype(&self) -> Dtype {
        match self {
            Self::F64(_) => Dtype::F64,
            Self::I64(_) => Dtype::I64,
            Self::I32(_) => Dtype::I32,
            Self::U64(_) => Dtype::U64,
        }
    }

    fn to_bytes(&self) -> Vec<u8> {
        match self {
            Self::F64(v) => v.iter().flat_map(|x| x.to_bits().to_le_bytes()).collect(),
            Self::I64(v) => v.iter().flat_map(|x| x.to_le_bytes()).collect(),
            Self::I32(v) => v.iter().flat_map(|x| x.to_le_bytes()).collect(),
            Self::U64(v) => v.iter().flat_map(|x| x.to_le_bytes()).collect(),
        }
    }

    fn from_bytes(name: &str, dtype: Dtype, bytes: &[u8]) -> Result<Self> {
        match dtype {
            Dtype::F64 => Ok(Self::F64(numbers(bytes, |b| f64::from_bits(u64::from_le_bytes(b))))),
            Dtype::I64 => Ok(Self::I64(numbers(bytes, i64::from_le_bytes))),
            Dtype::I32 => Ok(Self::I32(numbers(bytes, i32::from_le_bytes))),
            Dtype::U64 => Ok(Self::U64(numbers(bytes, u64::from_le_bytes))),
            other => Err(damaged(format!("array {name:?} has type {other}, which is never written"))),
        }
    }
}

fn numbers<const N: usize, T>(bytes: &[u8], convert: impl Fn([u8; N]) -> T) -> Vec<T> {
    let (items, _) = bytes.as_chunks::<N>();
    items.iter().map(|item| convert(*item)).collect()
}

fn damaged(what: impl Into<String>) -> Error {
    Error::Damaged { what: what.into() }
}

fn product(shape: &[usize]) -> Option<usize> {
    shape.iter().try_fold(1usize, |n, &axis| n.checked_mul(axis))
}

/// Packs `meta` and the arrays into one byte string. The order in which the arrays are given does not matter.
///
/// A name that comes twice, the layout's own name, and a shape that does not fit its numbers are internal errors.
pub fn pack(meta: &str, tensors: &[(String, Tensor)]) -> Result<Vec<u8>> {
    let fault = |what: String| Error::Internal { what };
    let mut order: Vec<&(String, Tensor)> = tensors.iter().collect();
    order.sort_by(|a, b| a.0.cmp(&b.0));
    if let Some(pair) = order.windows(2).find(|pair| pair[0].0 == pair[1].0) {
        return Err(fault(format!("two arrays are called {:?}", pair[0].0)));
    }
    let mut blobs = Vec::with_capacity(order.len());
    for (name, tensor) in order {
        if name == RESERVED {
            return Err(fault(format!("no array may be called {RESERVED:?}")));
        }
        if product(&tensor.shape) != Some(tensor.data.len()) {
            let (shape, n) = (&tensor.shape, tensor.data.len());
            return Err(fault(format!("array {name:?} has {n} numbers for the shape {shape:?}")));
        }
        blobs.push((name.as_str(), tensor, tensor.data.to_bytes()));
    }
    let refused = |e: SafeTensorError| fault(format!("arrays cannot be packed: {e}"));
    let views = blobs
        .iter()
        .map(|(name, tensor, bytes)| {
            Ok((*name, TensorView::new(tensor.data.dtype(), tensor.shape.clone(), bytes).map_err(refused)?))
        })
        .collect::<Result<Vec<_>>>()?;
    serialize(views, Some(HashMap::from([(KEY.to_string(), meta.to_string())]))).map_err(refused)
}

/// Reads what [`pack`] wrote: the text, and the arrays sorted by name.
///
/// Anything else is [`Error::Damaged`] with the reason: too short, a header that is too large, no UTF-8 or no JSON,
/// unknown types, ranges that overlap or leave bytes out, bytes beyond the end, or no text under "drumlin".
pub fn unpack(data: &[u8]) -> Result<(String, Vec<(String, Tensor)>)> {
    check_header(data)?;
    let (length, header) = SafeTensors::read_metadata(data).map_err(|e| damaged(reason(&e)))?;
    let texts = header.metadata().as_ref().filter(|texts| texts.len() == 1);
    let Some(meta) = texts.and_then(|texts| texts.get(KEY)) else {
        return Err(damaged("the header lacks the text \"drumlin\", or has others beside it"));
    };
    let body = data.get(8 + length..).unwrap_or_default();
    let mut tensors = Vec::new();
    for (name, info) in header.tensors() {
        let bytes = body.get(info.data_offsets.0..info.data_offsets.1);
        let bytes = bytes.ok_or_else(|| damaged(format!("array {name:?} lies outside the bytes")))?;
        let data = TensorData::from_bytes(&name, info.dtype, bytes)?;
        if product(&info.shape) != Some(data.len()) {
            return Err(damaged(format!("array {name:?} does not fill its shape")));
        }
        tensors.push((name, Tensor { shape: info.shape.clone(), data }));
    }
    tensors.sort_by(|a, b| a.0.cmp(&b.0));
    Ok((meta.clone(), tensors))
}

/// Refuses a header that does not fit the bytes, or holds a number outside its texts that no size can be. The
/// library adds up sizes as it reads them, and this keeps those sums far from overflow.
fn check_header(data: &[u8]) -> Result<()> {
    let Some((length, rest)) = data.split_first_chunk::<8>() else {
        return Err(damaged(format!("{} bytes are too few to hold a header", data.len())));
    };
    let length = u64::from_le_bytes(*length);
    if length > rest.len() as u64 {
        return Err(damaged(format!("the header should take {length} bytes, but {} are left", rest.len())));
    }
    let (mut inside, mut escaped, mut digits) = (false, false, 0);
    for &byte in &rest[..length as usize] {
        if inside {
            (inside, escaped) = (byte != b'"' || escaped, byte == b'\\' && !escaped);
        } else if byte == b'"' {
            (inside, digits) = (true, 0);
        } else {
            digits = if byte.is_ascii_digit() { digits + 1 } else { 0 };
            if digits > DIGITS {
                return Err(damaged("the header holds an impossible size"));
            }
        }
    }
    Ok(())
}

/// The library's reason in plain words.
fn reason(error: &SafeTensorError) -> String {
    match error {
        SafeTensorError::InvalidHeader(_) => "the header is not UTF-8 text".into(),
        SafeTensorError::InvalidHeaderDeserialization(e) => format!("the header cannot be read: {e}"),
        SafeTensorError::HeaderTooLarge => "the header is larger than any that is written".into(),
        SafeTensorError::HeaderTooSmall | SafeTensorError::InvalidHeaderLength => "the header is cut short".into(),
        SafeTensorError::InvalidOffset(name) => format!("array {name:?} overlaps another or leaves bytes out"),
        SafeTensorError::TensorInvalidInfo => "an array's shape does not fit its bytes".into(),
        SafeTensorError::MetadataIncompleteBuffer => "the arrays do not end where the bytes end".into(),
        SafeTensorError::ValidationOverflow => "an array's shape is impossibly large".into(),
        other => other.to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn example() -> Vec<(String, Tensor)> {
        vec![
            ("weights".into(), Tensor { shape: vec![2], data: TensorData::F64(vec![0.25, -0.0]) }),
            ("ids".into(), Tensor { shape: vec![3], data: TensorData::I64(vec![4, -1, i64::MIN]) }),
            ("a \"b\" é".into(), Tensor { shape: vec![1, 3], data: TensorData::I32(vec![1, -2, i32::MAX]) }),
            ("empty".into(), Tensor { shape: vec![0, 5], data: TensorData::F64(vec![]) }),
            ("counts".into(), Tensor { shape: vec![], data: TensorData::U64(vec![u64::MAX]) }),
        ]
    }

    fn raw(header: &str, body: &[u8]) -> Vec<u8> {
        [&(header.len() as u64).to_le_bytes(), header.as_bytes(), body].concat()
    }

    const META: &str = "{\"x\": \"\\\" 12345678901234567890\", \"é\": 1}";

    #[test]
    fn round_trip_and_order() {
        let bytes = pack(META, &example()).unwrap();
        let (meta, tensors) = unpack(&bytes).unwrap();
        assert_eq!(meta, META);
        let names: Vec<&str> = tensors.iter().map(|(name, _)| name.as_str()).collect();
        assert_eq!(names, ["a \"b\" é", "counts", "empty", "ids", "weights"]);
        for (name, tensor) in example() {
            assert!(tensors.contains(&(name, tensor)));
        }
        let mut turned = example();
        turned.reverse();
        assert_eq!(pack(META, &turned).unwrap(), bytes);
        assert_eq!(pack(&meta, &tensors).unwrap(), bytes);
        let nan = Tensor { shape: vec![1], data: TensorData::F64(vec![f64::from_bits(0x7ff8_0000_0000_0123)]) };
        let back = unpack(&pack("", &[("n".into(), nan)]).unwrap()).unwrap().1;
        assert!(matches!(&back[0].1.data, TensorData::F64(v) if v[0].to_bits() == 0x7ff8_0000_0000_0123));
        assert_eq!(unpack(&pack("", &[]).unwrap()).unwrap(), (String::new(), vec![]));
    }

    #[test]
    fn pack_refuses() {
        let one = Tensor { shape: vec![1], data: TensorData::F64(vec![1.0]) };
        assert!(pack("", &[("a".into(), one.clone()), ("a".into(), one.clone())]).is_err());
        assert!(pack("", &[("__metadata__".into(), one)]).is_err());
        for shape in [vec![2], vec![usize::MAX, 2], vec![0]] {
            let wrong = Tensor { shape, data: TensorData::F64(vec![1.0]) };
            assert!(pack("", &[("a".into(), wrong)]).is_err());
        }
    }

    #[test]
    fn cut_and_flipped_bytes_never_panic() {
        let bytes = pack(META, &example()).unwrap();
        for n in 0..bytes.len() {
            assert!(matches!(unpack(&bytes[..n]), Err(Error::Damaged { .. })), "{n}");
        }
        let mut longer = bytes.clone();
        longer.push(0);
        assert!(matches!(unpack(&longer), Err(Error::Damaged { .. })));
        for i in 0..bytes.len() {
            for value in (0..8).map(|bit| bytes[i] ^ (1 << bit)).chain([0, 255]) {
                let mut wrong = bytes.clone();
                wrong[i] = value;
                if let Err(error) = unpack(&wrong) {
                    assert!(matches!(error, Error::Damaged { .. }));
                }
            }
        }
    }

    #[test]
    fn crafted_headers_are_refused() {
        let meta = "\"__metadata__\":{\"drumlin\":\"\"}";
        let of = |dtype: &str, shape: &str, range: &str| {
            format!("{{{meta},\"a\":{{\"dtype\":\"{dtype}\",\"shape\":{shape},\"data_offsets\":{range}}}}}")
        };
        assert!(unpack(&raw(&of("F64", "[1]", "[0,8]"), &[0; 8])).is_ok());
        let two = |first: &str, second: &str| {
            let item = |name: &str, range: &str| {
                format!("\"{name}\":{{\"dtype\":\"F64\",\"shape\":[1],\"data_offsets\":{range}}}")
            };
            format!("{{{meta},{},{}}}", item("a", first), item("b", second))
        };
        assert!(unpack(&raw(&two("[8,16]", "[0,8]"), &[0; 16])).is_ok());
        let huge = "[0,18446744073709551608]";
        let long = format!("{{{meta}}}{}", " ".repeat(100_000_001));
        for (header, body) in [
            (of("F64", "[1]", "[0,8]"), 16),
            (of("F64", "[1]", "[0,8]"), 7),
            (of("F64", "[2]", "[0,8]"), 8),
            (of("F64", "[1]", "[8,16]"), 16),
            (of("F64", "[1]", "[8,0]"), 8),
            (of("F64", "[-1]", "[0,8]"), 8),
            (of("F32", "[2]", "[0,8]"), 8),
            (of("F99", "[1]", "[0,8]"), 8),
            (of("F64", "[2305843009213693951]", huge), 8),
            (of("F64", "[999999999999999,999999999999999]", "[0,8]"), 8),
            (two("[0,8]", "[0,8]"), 8),
            (two("[0,8]", "[4,12]"), 12),
            (two("[0,8]", "[16,24]"), 24),
            ("{}".into(), 0),
            ("{\"__metadata__\":{}}".into(), 0),
            ("{\"__metadata__\":{\"other\":\"\"}}".into(), 0),
            ("{\"__metadata__\":{\"drumlin\":\"\",\"other\":\"\"}}".into(), 0),
            ("{\"__metadata__\":{\"drumlin\":1}}".into(), 0),
            ("[".repeat(100_000), 0),
            (String::new(), 0),
            (long, 0),
        ] {
            let found = unpack(&raw(&header, &vec![0; body]));
            assert!(matches!(found, Err(Error::Damaged { .. })), "{:?}", header.get(..80));
        }
        let mut bytes = raw(&of("F64", "[1]", "[0,8]"), &[0; 8]);
        bytes[12] = 0xff;
        assert!(unpack(&bytes).unwrap_err().to_string().contains("UTF-8"));
        bytes[..8].copy_from_slice(&u64::MAX.to_le_bytes());
        assert!(unpack(&bytes).is_err());
    }
}
