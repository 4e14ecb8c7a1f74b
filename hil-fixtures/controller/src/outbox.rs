//! Frames on their way to the line: a ring that drops the oldest whole frame when it is full, and counts what it drops.
//! A frame that has begun is always finished, so a slow reader sees whole frames with gaps between them.

use heapless::Deque;
use offcurve_core::{board::Line, link::frame::Frame};

/// Up to `N` frames waiting.
#[derive(Debug, Default)]
pub struct Outbox<const N: usize> {
    waiting: Deque<Frame, N>,
    current: Frame,
    sent: usize,
    dropped: u32,
}

impl<const N: usize> Outbox<N> {
    /// Queues a frame; the oldest waiting one makes room when the ring is full.
    pub fn push(&mut self, frame: Frame) {
        if let Err(frame) = self.waiting.push_back(frame) {
            let _ = self.waiting.pop_front();
            self.dropped = self.dropped.saturating_add(1);
            let _ = self.waiting.push_back(frame);
        }
    }

    /// Frames dropped since start.
    #[must_use]
    pub const fn dropped(&self) -> u32 {
        self.dropped
    }

    /// Frames not yet wholly given to the line.
    #[must_use]
    pub fn waiting(&self) -> usize {
        self.waiting.len().saturating_add(usize::from(self.sent < self.current.len()))
    }

    /// Gives the line as much as it takes now.
    pub fn send(&mut self, line: &mut impl Line) {
        loop {
            let rest = self.current.get(self.sent..).unwrap_or(&[]);
            if rest.is_empty() {
                let Some(next) = self.waiting.pop_front() else { return };
                self.current = next;
                self.sent = 0;
                continue;
            }
            let taken = line.try_write(rest);
            if taken == 0 {
                return;
            }
            self.sent = self.sent.saturating_add(taken);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::vec::Vec;

    /// A line that takes `budget` bytes.
    struct Slow {
        budget: usize,
        taken: Vec<u8>,
    }

    impl Line for Slow {
        fn try_write(&mut self, bytes: &[u8]) -> usize {
            let n = bytes.len().min(self.budget);
            self.budget -= n;
            self.taken.extend_from_slice(&bytes[..n]);
            n
        }

        fn try_read(&mut self, _: &mut [u8]) -> usize {
            0
        }
    }

    fn frame(byte: u8) -> Frame {
        Frame::from_slice(&[byte; 4]).unwrap()
    }

    #[test]
    fn full_ring_drops_the_oldest_but_finishes_what_has_begun() {
        let mut outbox = Outbox::<2>::default();
        outbox.push(frame(1));
        let mut line = Slow { budget: 2, taken: Vec::new() };
        outbox.send(&mut line);
        assert_eq!(outbox.waiting(), 1);
        for byte in 2..=5 {
            outbox.push(frame(byte));
        }
        assert_eq!(outbox.dropped(), 2);
        line.budget = 100;
        outbox.send(&mut line);
        assert_eq!(outbox.waiting(), 0);
        assert_eq!(line.taken, [1, 1, 1, 1, 4, 4, 4, 4, 5, 5, 5, 5]);
    }
}
