//! Little-endian reading and writing of fixed layouts, without a path that can panic: every access is checked, and the
//! answer to a buffer that is too short is a value, not an abort.

/// Writes into a buffer from the front; remembers an overflow instead of failing at each call.
pub(crate) struct Writer<'a> {
    buffer: &'a mut [u8],
    written: usize,
    overflowed: bool,
}

impl<'a> Writer<'a> {
    pub(crate) const fn new(buffer: &'a mut [u8]) -> Self {
        Self { buffer, written: 0, overflowed: false }
    }

    pub(crate) fn raw(&mut self, bytes: &[u8]) {
        let end = self.written.saturating_add(bytes.len());
        match self.buffer.get_mut(self.written..end) {
            Some(place) => {
                // Not copy_from_slice: the optimiser does not see that the lengths agree, and would keep its panic.
                for (to, &from) in place.iter_mut().zip(bytes) {
                    *to = from;
                }
                self.written = end;
            }
            None => self.overflowed = true,
        }
    }

    pub(crate) fn u8(&mut self, value: u8) {
        self.raw(&[value]);
    }

    pub(crate) fn u16(&mut self, value: u16) {
        self.raw(&value.to_le_bytes());
    }

    pub(crate) fn u32(&mut self, value: u32) {
        self.raw(&value.to_le_bytes());
    }

    pub(crate) fn u64(&mut self, value: u64) {
        self.raw(&value.to_le_bytes());
    }

    pub(crate) fn f32(&mut self, value: f32) {
        self.u32(value.to_bits());
    }

    /// How many bytes were written; `None` if any did not fit.
    pub(crate) const fn finish(self) -> Option<usize> {
        if self.overflowed { None } else { Some(self.written) }
    }
}

/// Reads a buffer from the front; `None` once it has run out.
#[derive(Clone, Copy)]
pub(crate) struct Reader<'a> {
    rest: &'a [u8],
}

impl<'a> Reader<'a> {
    pub(crate) const fn new(bytes: &'a [u8]) -> Self {
        Self { rest: bytes }
    }

    pub(crate) fn array<const N: usize>(&mut self) -> Option<[u8; N]> {
        let (head, rest) = self.rest.split_first_chunk::<N>()?;
        self.rest = rest;
        Some(*head)
    }

    pub(crate) fn raw(&mut self, len: usize) -> Option<&'a [u8]> {
        let (head, rest) = self.rest.split_at_checked(len)?;
        self.rest = rest;
        Some(head)
    }

    pub(crate) fn u8(&mut self) -> Option<u8> {
        self.array::<1>().map(|[byte]| byte)
    }

    pub(crate) fn u16(&mut self) -> Option<u16> {
        self.array().map(u16::from_le_bytes)
    }

    pub(crate) fn u32(&mut self) -> Option<u32> {
        self.array().map(u32::from_le_bytes)
    }

    pub(crate) fn u64(&mut self) -> Option<u64> {
        self.array().map(u64::from_le_bytes)
    }

    pub(crate) fn f32(&mut self) -> Option<f32> {
        self.u32().map(f32::from_bits)
    }

    pub(crate) const fn is_empty(&self) -> bool {
        self.rest.is_empty()
    }
}
