//! CRC-32 (the ISO-HDLC parameters, as in Ethernet) over frames, profiles and estimates: one polynomial everywhere, so
//! one table in flash.

/// One table of 1 KiB for all users.
static CRC: crc::Crc<u32, crc::Table<1>> = crc::Crc::<u32, crc::Table<1>>::new(&crc::CRC_32_ISO_HDLC);

/// CRC-32 of a byte string.
#[must_use]
pub const fn crc32(bytes: &[u8]) -> u32 {
    CRC.checksum(bytes)
}

/// A CRC-32 fed piece by piece.
pub(crate) struct Running(crc::Digest<'static, u32, crc::Table<1>>);

impl Running {
    pub(crate) fn new() -> Self {
        Self(CRC.digest())
    }

    pub(crate) fn feed(&mut self, bytes: &[u8]) {
        self.0.update(bytes);
    }

    pub(crate) fn finish(self) -> u32 {
        self.0.finalize()
    }
}

#[cfg(test)]
mod tests {
    #[test]
    fn published_check_value() {
        // Source: catalogue of parametrised CRC algorithms, CRC-32/ISO-HDLC: check value of "123456789" is CBF43926.
        assert_eq!(super::crc32(b"123456789"), 0xcbf4_3926);
        let mut running = super::Running::new();
        running.feed(b"1234");
        running.feed(b"56789");
        assert_eq!(running.finish(), 0xcbf4_3926);
    }
}
