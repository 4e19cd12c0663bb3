//! Arrow record batches to typed columns: names resolved, types checked, values widened to float64 at load.

use crate::error::{Error, Result};
use crate::kernels::lanes::{Kernel, Lanes};
use crate::kernels::tier;
use crate::random::{hash_bytes, hash2, mix64};
use arrow_array::cast::AsArray;
use arrow_array::types::{
    Decimal128Type, Float16Type, Float32Type, Float64Type, Int8Type, Int16Type, Int32Type, Int64Type, UInt8Type,
    UInt16Type, UInt32Type, UInt64Type,
};
use arrow_array::{Array, ArrayRef, BooleanArray, PrimitiveArray, RecordBatch};
use arrow_schema::DataType;

/// How batches are read: which columns play which part, by name.
#[derive(Clone, Debug, Default)]
pub struct Reading {
    /// The fitted columns, in the order of the model.
    pub columns: Vec<String>,
    /// Values per column that stand for a gap.
    pub codes: Vec<Vec<f64>>,
    /// Row weights, a non-negative number per row.
    pub weight: Option<String>,
    /// Boolean column: false or null leaves the row out.
    pub keep: Option<String>,
    /// Boolean column: true holds the row out of the fit.
    pub held: Option<String>,
    /// Share of rows held out by a hash of the key, else of the row number.
    pub held_share: f64,
    /// Seed of that hash.
    pub held_seed: u64,
    /// Columns that name a row to its owner.
    pub key: Vec<String>,
}

/// A column of one batch in a type that widens to float64.
#[derive(Clone)]
pub enum Column {
    /// 64-bit floats.
    F64(PrimitiveArray<Float64Type>),
    /// 32-bit floats, kept so and widened at load.
    F32(PrimitiveArray<Float32Type>),
    /// Anything else that widens: converted when the batch arrives.
    Widened(PrimitiveArray<Float64Type>),
}

/// Values of a column in their own type.
#[derive(Clone, Copy)]
pub enum Values<'a> {
    /// 64-bit floats.
    F64(&'a [f64]),
    /// 32-bit floats.
    F32(&'a [f32]),
}

/// Whether every value is finite.
pub fn all_finite(values: &[f64]) -> bool {
    tier::run(AllFinite(values))
}

struct AllFinite<'a>(&'a [f64]);

impl Kernel for AllFinite<'_> {
    type Out = bool;
    #[inline(always)]
    fn run<L: Lanes>(self, l: L) -> bool {
        // x - x is 0 for finite values and NaN otherwise, and a sum keeps a NaN.
        let mut sums = [l.splat(0.0); 4];
        let chunks = self.0.chunks_exact(4 * L::N);
        let rest = chunks.remainder();
        for chunk in chunks {
            for v in 0..4 {
                let x = l.load(&chunk[v * L::N..]);
                sums[v] = l.add(sums[v], l.sub(x, x));
            }
        }
        let mut out = [0.0; 8];
        let mut finite = rest.iter().all(|x| x.is_finite());
        for sum in sums {
            l.store(sum, &mut out);
            finite &= out.iter().all(|x| *x == 0.0);
        }
        finite
    }
}

macro_rules! widen {
    ($array:expr, $($kind:pat => $native:ty),+ $(,)?) => {
        match $array.data_type() {
            $($kind => Some($array.as_primitive::<$native>().unary::<_, Float64Type>(|v| v as f64)),)+
            _ => None,
        }
    };
}

impl Column {
    /// Takes an Arrow array of any numeric, decimal or boolean type; integers beyond 2^53 round as in any conversion.
    pub fn new(name: &str, array: &ArrayRef) -> Result<Self> {
        let widened = widen!(array,
            DataType::Int8 => Int8Type, DataType::Int16 => Int16Type, DataType::Int32 => Int32Type,
            DataType::Int64 => Int64Type, DataType::UInt8 => UInt8Type, DataType::UInt16 => UInt16Type,
            DataType::UInt32 => UInt32Type, DataType::UInt64 => UInt64Type,
        );
        if let Some(column) = widened {
            return Ok(Self::Widened(column));
        }
        match array.data_type() {
            DataType::Float64 => Ok(Self::F64(array.as_primitive::<Float64Type>().clone())),
            DataType::Float32 => Ok(Self::F32(array.as_primitive::<Float32Type>().clone())),
            DataType::Float16 => {
                Ok(Self::Widened(array.as_primitive::<Float16Type>().unary::<_, Float64Type>(|v| v.to_f64())))
            }
            DataType::Boolean => {
                let bits = array.as_boolean();
                Ok(Self::Widened(bits.iter().map(|v| v.map(|b| if b { 1.0 } else { 0.0 })).collect()))
            }
            DataType::Decimal128(_, scale) => {
                let unit = 10f64.powi(i32::from(*scale));
                let column = array.as_primitive::<Decimal128Type>();
                Ok(Self::Widened(column.unary::<_, Float64Type>(|v| v as f64 / unit)))
            }
            other => Err(Error::Schema {
                name: name.into(),
                what: format!("type {other} cannot be fitted"),
                advice: "name numeric columns only; leave it out, use it as key, or turn it into numbers first".into(),
            }),
        }
    }

    /// Rows in the column.
    pub fn len(&self) -> usize {
        match self {
            Self::F64(a) | Self::Widened(a) => a.len(),
            Self::F32(a) => a.len(),
        }
    }

    /// Whether the column has no rows.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Whether the value of row `i` is null.
    pub fn is_null(&self, i: usize) -> bool {
        match self {
            Self::F64(a) | Self::Widened(a) => a.is_null(i),
            Self::F32(a) => a.is_null(i),
        }
    }

    /// The values of rows `start..start + n` in their own type; what stands under a null has no meaning.
    #[inline(always)]
    pub fn values(&self, start: usize, n: usize) -> Values<'_> {
        match self {
            Self::F64(a) | Self::Widened(a) => Values::F64(&a.values()[start..start + n]),
            Self::F32(a) => Values::F32(&a.values()[start..start + n]),
        }
    }

    /// The value of row `i`, widened.
    pub fn value(&self, i: usize) -> f64 {
        match self {
            Self::F64(a) | Self::Widened(a) => a.value(i),
            Self::F32(a) => f64::from(a.value(i)),
        }
    }

    /// Whether no value of rows `start..start + n` is null, NaN or infinite.
    pub fn is_plain(&self, start: usize, n: usize) -> bool {
        let nulls = match self {
            Self::F64(a) | Self::Widened(a) => a.nulls(),
            Self::F32(a) => a.nulls(),
        };
        if nulls.is_some_and(|nulls| nulls.slice(start, n).null_count() > 0) {
            return false;
        }
        match self.values(start, n) {
            Values::F64(values) => all_finite(values),
            // An exponent of ones marks NaN and infinities.
            Values::F32(values) => !values.iter().fold(false, |bad, x| bad | (x.to_bits() << 1 >= 0xff00_0000)),
        }
    }

    /// Copies rows `start..start + out.len()` to `out` as float64; null becomes NaN.
    pub fn load(&self, start: usize, out: &mut [f64]) {
        let n = out.len();
        let nulls = match self {
            Self::F64(a) | Self::Widened(a) => {
                out.copy_from_slice(&a.values()[start..start + n]);
                a.nulls()
            }
            Self::F32(a) => {
                for (o, v) in out.iter_mut().zip(&a.values()[start..start + n]) {
                    *o = f64::from(*v);
                }
                a.nulls()
            }
        };
        if let Some(nulls) = nulls.filter(|b| b.null_count() > 0) {
            for (i, o) in out.iter_mut().enumerate() {
                if nulls.is_null(start + i) {
                    *o = f64::NAN;
                }
            }
        }
    }
}

/// One batch with its columns resolved.
pub struct Rows {
    /// Row number of the first row in the source.
    pub first_row: u64,
    /// Rows in the batch.
    pub len: usize,
    /// The fitted columns.
    pub features: Vec<Column>,
    /// Row weights.
    pub weight: Option<Column>,
    /// Rows that the filter keeps.
    pub keep: Option<BooleanArray>,
    /// Rows that are held out.
    pub held: Option<BooleanArray>,
    /// Hash of the key per row.
    pub key: Option<Vec<u64>>,
}

impl Rows {
    /// Bytes of the columns that are kept.
    pub fn bytes(&self) -> usize {
        let columns = self.features.iter().chain(&self.weight);
        let values: usize = columns.map(|c| if matches!(c, Column::F32(_)) { 4 } else { 8 }).sum();
        self.len * (values + if self.key.is_some() { 8 } else { 0 })
    }
}

impl Reading {
    /// Resolves the columns of `batch` by name. Extra columns are ignored; a missing one is an error naming it.
    pub fn read(&self, batch: &RecordBatch, first_row: u64) -> Result<Rows> {
        let features =
            self.columns.iter().map(|name| Column::new(name, find(batch, name)?)).collect::<Result<Vec<_>>>()?;
        let weight = self.weight.as_ref().map(|name| Column::new(name, find(batch, name)?)).transpose()?;
        let key = if self.key.is_empty() {
            None
        } else {
            let mut hashes = vec![0x9e37_79b9_7f4a_7c15u64; batch.num_rows()];
            for name in &self.key {
                hash_column(name, find(batch, name)?, &mut hashes)?;
            }
            Some(hashes)
        };
        let flag = |name: &Option<String>| -> Result<Option<BooleanArray>> {
            let Some(name) = name else { return Ok(None) };
            match find(batch, name)?.as_boolean_opt() {
                Some(array) => Ok(Some(array.clone())),
                None => Err(Error::Schema {
                    name: name.clone(),
                    what: "a filter must give true or false".into(),
                    advice: "compare a column with a value".into(),
                }),
            }
        };
        Ok(Rows {
            first_row,
            len: batch.num_rows(),
            features,
            weight,
            keep: flag(&self.keep)?,
            held: flag(&self.held)?,
            key,
        })
    }

    /// Whether every row is fitted whose values are finite: no codes, no filter, nothing held out.
    pub fn takes_all(&self) -> bool {
        let held = self.held.is_some() || self.held_share > 0.0;
        self.keep.is_none() && !held && self.codes.iter().all(Vec::is_empty)
    }

    /// Whether the row is held out of the fit.
    pub fn is_held(&self, rows: &Rows, i: usize) -> bool {
        if let Some(held) = &rows.held {
            return held.is_valid(i) && held.value(i);
        }
        if self.held_share > 0.0 {
            let id = rows.key.as_ref().map_or(rows.first_row + i as u64, |key| key[i]);
            let u = (hash2(self.held_seed ^ 0x5bd1_e995_7b93_b1b3, id) >> 11) as f64 / (1u64 << 53) as f64;
            return u < self.held_share;
        }
        false
    }
}

fn find<'a>(batch: &'a RecordBatch, name: &str) -> Result<&'a ArrayRef> {
    batch.column_by_name(name).ok_or_else(|| Error::Schema {
        name: name.into(),
        what: "no such column in the rows".into(),
        advice: format!(
            "the rows have: {}",
            batch.schema().fields().iter().map(|f| f.name().as_str()).collect::<Vec<_>>().join(", ")
        ),
    })
}

/// Mixes one key column into the hashes. Integers of any width with the same value hash alike.
fn hash_column(name: &str, array: &ArrayRef, hashes: &mut [u64]) -> Result<()> {
    macro_rules! bytes {
        ($typed:expr) => {{
            let typed = $typed;
            for (i, h) in hashes.iter_mut().enumerate() {
                *h = if typed.is_null(i) { mix64(*h ^ 1) } else { hash_bytes(*h, typed.value(i).as_ref()) };
            }
        }};
    }
    macro_rules! integers {
        ($native:ty) => {{
            let typed = array.as_primitive::<$native>();
            for (i, h) in hashes.iter_mut().enumerate() {
                *h = if typed.is_null(i) { mix64(*h ^ 1) } else { hash2(*h, typed.value(i) as i64 as u64) };
            }
        }};
    }
    use arrow_array::types as t;
    use arrow_schema::TimeUnit::{Microsecond, Millisecond, Nanosecond, Second};
    match array.data_type() {
        DataType::Int8 => integers!(Int8Type),
        DataType::Int16 => integers!(Int16Type),
        DataType::Int32 => integers!(Int32Type),
        DataType::Int64 => integers!(Int64Type),
        DataType::UInt8 => integers!(UInt8Type),
        DataType::UInt16 => integers!(UInt16Type),
        DataType::UInt32 => integers!(UInt32Type),
        DataType::UInt64 => integers!(UInt64Type),
        DataType::Date32 => integers!(t::Date32Type),
        DataType::Date64 => integers!(t::Date64Type),
        DataType::Timestamp(Second, _) => integers!(t::TimestampSecondType),
        DataType::Timestamp(Millisecond, _) => integers!(t::TimestampMillisecondType),
        DataType::Timestamp(Microsecond, _) => integers!(t::TimestampMicrosecondType),
        DataType::Timestamp(Nanosecond, _) => integers!(t::TimestampNanosecondType),
        DataType::Float64 | DataType::Float32 => {
            let column = Column::new(name, array)?;
            let mut values = vec![0.0; array.len()];
            column.load(0, &mut values);
            for (h, v) in hashes.iter_mut().zip(values) {
                *h = hash2(*h, (v + 0.0).to_bits());
            }
        }
        DataType::Utf8 => bytes!(array.as_string::<i32>()),
        DataType::LargeUtf8 => bytes!(array.as_string::<i64>()),
        DataType::Utf8View => bytes!(array.as_string_view()),
        DataType::Binary => bytes!(array.as_binary::<i32>()),
        DataType::LargeBinary => bytes!(array.as_binary::<i64>()),
        DataType::BinaryView => bytes!(array.as_binary_view()),
        DataType::FixedSizeBinary(_) => bytes!(array.as_fixed_size_binary()),
        DataType::Boolean => {
            let typed = array.as_boolean();
            for (i, h) in hashes.iter_mut().enumerate() {
                *h = if typed.is_null(i) { mix64(*h ^ 1) } else { hash2(*h, u64::from(typed.value(i))) };
            }
        }
        other => {
            return Err(Error::Schema {
                name: name.into(),
                what: format!("type {other} cannot be a key"),
                advice: "use whole numbers, text, dates, timestamps or true/false".into(),
            });
        }
    }
    Ok(())
}
