//! Little-endian numbers in and out of byte strings, every length checked.

use crate::error::{Error, Result};

/// Reads numbers from bytes that may be anything.
pub struct Reader<'a> {
    data: &'a [u8],
}

impl<'a> Reader<'a> {
    /// A reader at the start of `data`.
    pub fn new(data: &'a [u8]) -> Self {
        Self { data }
    }

    fn take(&mut self, n: usize) -> Result<&'a [u8]> {
        if n > self.data.len() {
            return Err(Error::Damaged { what: format!("{n} bytes wanted, {} left", self.data.len()) });
        }
        let (head, tail) = self.data.split_at(n);
        self.data = tail;
        Ok(head)
    }

    /// One byte.
    pub fn u8(&mut self) -> Result<u8> {
        Ok(self.take(1)?[0])
    }

    /// One unsigned integer.
    pub fn u64(&mut self) -> Result<u64> {
        let mut b = [0u8; 8];
        b.copy_from_slice(self.take(8)?);
        Ok(u64::from_le_bytes(b))
    }

    /// One length, which must fit the bytes that are left when each item takes `width` bytes.
    pub fn length(&mut self, width: usize) -> Result<usize> {
        let n = self.u64()?;
        if n > (self.data.len() / width.max(1)) as u64 {
            return Err(Error::Damaged { what: format!("a length of {n} does not fit") });
        }
        Ok(n as usize)
    }

    /// One float.
    pub fn f64(&mut self) -> Result<f64> {
        Ok(f64::from_bits(self.u64()?))
    }

    /// A length and that many floats.
    pub fn floats(&mut self) -> Result<Vec<f64>> {
        let n = self.length(8)?;
        (0..n).map(|_| self.f64()).collect()
    }

    /// A length and that many unsigned integers.
    pub fn integers(&mut self) -> Result<Vec<u64>> {
        let n = self.length(8)?;
        (0..n).map(|_| self.u64()).collect()
    }

    /// Nothing may be left.
    pub fn finish(&self) -> Result<()> {
        if self.data.is_empty() {
            Ok(())
        } else {
            Err(Error::Damaged { what: format!("{} bytes too many", self.data.len()) })
        }
    }
}

/// Appends one unsigned integer.
pub fn put_u64(out: &mut Vec<u8>, value: u64) {
    out.extend_from_slice(&value.to_le_bytes());
}

/// Appends one float.
pub fn put_f64(out: &mut Vec<u8>, value: f64) {
    put_u64(out, value.to_bits());
}

/// Appends a length and the floats.
pub fn put_floats(out: &mut Vec<u8>, values: &[f64]) {
    put_u64(out, values.len() as u64);
    values.iter().for_each(|&v| put_f64(out, v));
}

/// Appends a length and the integers.
pub fn put_integers(out: &mut Vec<u8>, values: &[u64]) {
    put_u64(out, values.len() as u64);
    values.iter().for_each(|&v| put_u64(out, v));
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn round_trip_and_refusals() {
        let mut out = vec![7u8];
        put_floats(&mut out, &[1.5, -0.0, f64::INFINITY]);
        put_integers(&mut out, &[3, u64::MAX]);
        let mut r = Reader::new(&out);
        assert_eq!(r.u8().unwrap(), 7);
        let f = r.floats().unwrap();
        assert_eq!(f.len(), 3);
        assert!(f[1] == 0.0 && f[1].is_sign_negative() && f[2].is_infinite());
        assert_eq!(r.integers().unwrap(), vec![3, u64::MAX]);
        r.finish().unwrap();
        assert!(Reader::new(&out[..10]).floats().is_err());
        assert!(Reader::new(&out).finish().is_err());
        let mut huge = Vec::new();
        put_u64(&mut huge, u64::MAX);
        assert!(Reader::new(&huge).floats().is_err());
    }
}
