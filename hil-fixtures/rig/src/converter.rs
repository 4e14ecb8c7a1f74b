//! The analogue converter chip of the rig, bit by bit as its SPI pins show it: 12 bits, 8 inputs.
//!
//! While the chip is selected it exchanges 16-bit frames, most significant bit first. Bits 13..11 of a received frame
//! select the input that the *next* frame reports; the frame it sends meanwhile holds four zero bits and the result
//! for the input selected by the frame before (input 0 after power-up). Inputs are loop currents over a shunt:
//! `counts = round(I · 4095 / 24 mA)`, so a broken loop reads 0 and the NE 43 failure bands stay visible.
//!
//! A frame cut short by deselection changes nothing. Not modelled: conversion time, reference error, noise of its
//! own beyond rounding (half a count is 0.02 % of a 16 mA span).

/// Current at the highest count, mA.
pub const FULL_SCALE_MA: f64 = 24.0;
/// Highest count.
pub const MAX_COUNTS: u16 = 4095;
/// Inputs of the chip.
pub const INPUTS: usize = 8;

/// Counts for a loop current; negative currents and NaN read 0, too large ones [`MAX_COUNTS`].
pub fn counts(current_ma: f64) -> u16 {
    // `as` saturates and takes NaN to 0, which is what the chip's input clamp does.
    ((current_ma * f64::from(MAX_COUNTS) / FULL_SCALE_MA).round() as u16).min(MAX_COUNTS)
}

/// Loop current in mA at a count, the inverse of [`counts`] but for rounding.
pub fn current_ma(counts: u16) -> f64 {
    f64::from(counts) * FULL_SCALE_MA / f64::from(MAX_COUNTS)
}

/// The frame that selects an input for the frame after it; only the low three bits of `input` count.
pub fn select_frame(input: u8) -> [u8; 2] {
    [(input & 7) << 3, 0]
}

/// What is wrong with the chip.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum ConverterFault {
    /// Nothing.
    #[default]
    None,
    /// No answer: the data line idles high, so every byte reads 0xFF.
    Dead,
    /// One bit of every result is stuck.
    StuckBit {
        /// Bit number, 0 (lowest) to 11.
        bit: u8,
        /// The level it is stuck at.
        high: bool,
    },
}

/// The chip.
#[derive(Debug, Clone, Default)]
pub struct Converter {
    selected: u8,
    fault: ConverterFault,
}

impl Converter {
    /// A healthy chip after power-up.
    pub fn new() -> Self {
        Self::default()
    }

    /// One selection of the chip: clocks `mosi` in and `miso` out, byte for byte, with the inputs at `currents` (mA).
    ///
    /// The slices may differ in length: the clock runs for the longer one; missing bytes are sent as 0, surplus
    /// answers are lost. Each complete pair of bytes is a frame.
    pub fn transfer(&mut self, mosi: &[u8], miso: &mut [u8], currents: &[f64; INPUTS]) {
        if self.fault == ConverterFault::Dead {
            miso.fill(0xFF);
            return;
        }
        let clocked = mosi.len().max(miso.len());
        for start in (0..clocked).step_by(2) {
            let answer = self.result(currents).to_be_bytes();
            for (place, byte) in miso.iter_mut().skip(start).take(2).zip(answer) {
                *place = byte;
            }
            if start + 1 < clocked {
                let control = mosi.get(start).copied().unwrap_or(0);
                self.selected = (control >> 3) & 7;
            }
        }
    }

    fn result(&self, currents: &[f64; INPUTS]) -> u16 {
        let exact = counts(currents.get(usize::from(self.selected)).copied().unwrap_or(0.0));
        match self.fault {
            ConverterFault::StuckBit { bit, high: true } => exact | (1 << (bit % 12)),
            ConverterFault::StuckBit { bit, high: false } => exact & !(1 << (bit % 12)),
            ConverterFault::None | ConverterFault::Dead => exact,
        }
    }

    /// Sets or clears a fault. A chip that comes back from the dead has been powered up anew: input 0 is selected.
    pub fn set_fault(&mut self, fault: ConverterFault) {
        if self.fault == ConverterFault::Dead && fault != ConverterFault::Dead {
            self.selected = 0;
        }
        self.fault = fault;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Inputs at 0, 3, 6, ... 21 mA: counts 0, 512, 1024, 1536, 2048, 2559, 3071, 3583 (n·511.875 rounded).
    const STAIRS: [f64; 8] = [0.0, 3.0, 6.0, 9.0, 12.0, 15.0, 18.0, 21.0];

    #[test]
    fn answer_belongs_to_the_frame_before() {
        let mut chip = Converter::new();
        let mut miso = [0xAA; 8];
        // select 1, select 4, select 7, select 0
        chip.transfer(&[0x08, 0x00, 0x20, 0x00, 0x38, 0x00, 0x00, 0x00], &mut miso, &STAIRS);
        assert_eq!(miso, [0x00, 0x00, 0x02, 0x00, 0x08, 0x00, 0x0D, 0xFF]); // inputs 0, 1, 4, 7
        // The selection outlives deselection.
        chip.transfer(&[0x28, 0x00], &mut miso[..2], &STAIRS);
        assert_eq!(miso[..2], [0x00, 0x00]);
        chip.transfer(&[0x00, 0x00], &mut miso[..2], &STAIRS);
        assert_eq!(miso[..2], [0x09, 0xFF]); // input 5, 2559
    }

    #[test]
    fn only_the_three_select_bits_count() {
        let mut chip = Converter::new();
        let mut miso = [0; 4];
        chip.transfer(&[0xC7 | 0x10, 0xFF, 0x00, 0x00], &mut miso, &STAIRS); // input 2 among set neighbours
        assert_eq!(miso[2..], [0x04, 0x00]);
    }

    #[test]
    fn a_frame_cut_short_changes_nothing() {
        let mut chip = Converter::new();
        let mut miso = [0; 2];
        chip.transfer(&[0x38], &mut miso[..1], &STAIRS);
        chip.transfer(&[0x00, 0x00], &mut miso, &[24.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0]);
        assert_eq!(miso, [0x0F, 0xFF]); // still input 0, now at full scale
    }

    #[test]
    fn counts_saturate_and_invert() {
        assert_eq!([counts(-1.0), counts(f64::NAN), counts(24.0), counts(400.0)], [0, 0, 4095, 4095]);
        for code in [0, 1, 682, 3412, 4095] {
            assert_eq!(counts(current_ma(code)), code);
        }
    }

    #[test]
    fn faults_show_on_the_pins() {
        let mut chip = Converter::new();
        let mut miso = [0; 4];
        chip.set_fault(ConverterFault::StuckBit { bit: 3, high: true });
        chip.transfer(&[0x08, 0, 0, 0], &mut miso, &STAIRS);
        assert_eq!(miso, [0x00, 0x08, 0x02, 0x08]);
        chip.set_fault(ConverterFault::StuckBit { bit: 9, high: false });
        chip.transfer(&select_frame(1), &mut miso[..2], &STAIRS);
        chip.transfer(&[0, 0], &mut miso[..2], &STAIRS);
        assert_eq!(miso[..2], [0x00, 0x00]); // 512 without its bit 9
        chip.set_fault(ConverterFault::Dead);
        chip.transfer(&[0x38, 0, 0, 0], &mut miso, &STAIRS);
        assert_eq!(miso, [0xFF; 4]);
        chip.set_fault(ConverterFault::None);
        chip.transfer(&[0, 0], &mut miso[..2], &[6.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 9.0]);
        assert_eq!(miso[..2], [0x04, 0x00]); // input 0 again, not the 7 sent to a dead chip
    }
}
