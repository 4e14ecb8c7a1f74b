//! Loop currents from a 12-bit, 8-input SPI converter behind a shunt, over any embedded-hal [`SpiDevice`].
//!
//! The chip answers in 16-bit frames, most significant byte first. Bits 13–11 of a frame sent select the input that the
//! NEXT frame returns, as four zero bits and the 12-bit result: so one scan of `n` inputs is one transfer of `n + 1`
//! frames whose first answer is thrown away. Anything in the four zero bits is no answer of this chip.

use embedded_hal::spi::{Error as _, SpiDevice};
use offcurve_core::board::{ChannelSource, LOOP_INPUTS, LoopCurrent, ScanError};

const FRAME: usize = 2;
const LONGEST: usize = FRAME * (LOOP_INPUTS + 1);

/// The converter with its shunt.
#[derive(Debug)]
pub struct Converter<SPI> {
    spi: SPI,
    milliamperes_per_count: f32,
}

impl<SPI: SpiDevice> Converter<SPI> {
    /// `milliamperes_at_full_scale` is the loop current that gives the count 4095 on this board's shunt and reference.
    pub const fn new(spi: SPI, milliamperes_at_full_scale: f32) -> Self {
        Self { spi, milliamperes_per_count: milliamperes_at_full_scale / 4095.0 }
    }
}

impl<SPI: SpiDevice> ChannelSource for Converter<SPI> {
    fn scan(&mut self, into: &mut [LoopCurrent]) -> Result<(), ScanError> {
        let inputs = into.len().min(LOOP_INPUTS);
        let mut frames = [0_u8; LONGEST];
        for (input, frame) in frames.chunks_exact_mut(FRAME).take(inputs).enumerate() {
            if let [high, _] = frame {
                *high = (input as u8) << 3; // below 8: bits 13 to 11 of the frame
            }
        }
        let length = FRAME.saturating_mul(inputs.saturating_add(1));
        let used = frames.get_mut(..length).unwrap_or(&mut []);
        self.spi.transfer_in_place(used).map_err(|error| ScanError::Bus(error.kind()))?;
        for (frame, current) in used.chunks_exact(FRAME).skip(1).zip(into) {
            let &[high, low] = frame else { return Err(ScanError::NotAConverter) };
            if high & 0xf0 != 0 {
                return Err(ScanError::NotAConverter);
            }
            let count = u16::from_be_bytes([high, low]);
            *current = LoopCurrent::from_milliamperes(f32::from(count) * self.milliamperes_per_count);
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use embedded_hal::spi::{ErrorKind, ErrorType, Operation};
    use std::vec::Vec;

    /// Answers with fixed bytes and remembers what was sent.
    struct Chip {
        answer: Vec<u8>,
        sent: Vec<u8>,
    }

    impl ErrorType for Chip {
        type Error = ErrorKind;
    }

    impl SpiDevice for Chip {
        fn transaction(&mut self, operations: &mut [Operation<'_, u8>]) -> Result<(), ErrorKind> {
            for operation in operations {
                let Operation::TransferInPlace(bytes) = operation else { return Err(ErrorKind::Other) };
                self.sent.extend_from_slice(bytes);
                if self.answer.is_empty() {
                    return Err(ErrorKind::Overrun);
                }
                bytes.copy_from_slice(&self.answer);
            }
            Ok(())
        }
    }

    fn scan(answer: &[u8]) -> (Result<Vec<f32>, ScanError>, Vec<u8>) {
        let mut converter = Converter::new(Chip { answer: answer.to_vec(), sent: Vec::new() }, 24.0);
        let mut currents = [LoopCurrent::default(); 3];
        let result = converter.scan(&mut currents);
        (result.map(|()| currents.map(LoopCurrent::milliamperes).to_vec()), converter.spi.sent)
    }

    #[test]
    fn one_scan_byte_for_byte() {
        // Full scale, half scale and zero on inputs 0, 1, 2; the first answer is from the scan before.
        let (currents, sent) = scan(&[0x01, 0x23, 0x0f, 0xff, 0x08, 0x00, 0x00, 0x00]);
        assert_eq!(sent, [0x00, 0, 0x08, 0, 0x10, 0, 0x00, 0]);
        let currents = currents.unwrap();
        for (got, want) in currents.iter().zip([24.0, 24.0 * 2048.0 / 4095.0, 0.0]) {
            assert!((got - want).abs() < 1e-5, "{currents:?}");
        }
    }

    #[test]
    fn a_floating_data_line_is_no_converter() {
        assert_eq!(scan(&[0xff; 8]).0, Err(ScanError::NotAConverter));
    }

    #[test]
    fn a_bus_error_keeps_its_kind() {
        assert_eq!(scan(&[]).0, Err(ScanError::Bus(ErrorKind::Overrun)));
    }
}
