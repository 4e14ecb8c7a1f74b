//! Lines and fields of a recorded file.
//!
//! Every line is taken by itself: a quoted field may hold separators but not line ends, so that one stray quotation
//! mark in a junk row spoils that row and not the rest of the file, as it would with a general CSV reader. No field of
//! a recording needs a line end. Lines end with LF or CR LF; a byte-order mark at the beginning is skipped.

use super::ReplayError;
use std::{
    io::{ErrorKind, Read},
    path::Path,
};

/// The longest line taken, bytes: a recording of a thousand channels stays far below it.
pub(super) const LONGEST_LINE: usize = 1 << 20;

/// Reads a file line by line.
pub(super) struct Lines<R> {
    source: R,
    buffer: Vec<u8>,
    /// The unread part of the buffer.
    start: usize,
    end: usize,
    ended: bool,
    number: u64,
}

impl<R: Read> Lines<R> {
    pub(super) fn new(source: R) -> Self {
        Self { source, buffer: vec![0; 1 << 18], start: 0, end: 0, ended: false, number: 0 }
    }

    /// The next line without its end, and its number from 1; `None` at the end of the file. `file` is for messages.
    pub(super) fn next(&mut self, file: &Path) -> Result<Option<(u64, &[u8])>, ReplayError> {
        let mut searched = 0;
        let length = loop {
            let unread = &self.buffer[self.start..self.end];
            if let Some(at) = memchr::memchr(b'\n', &unread[searched..]) {
                break searched + at;
            }
            searched = unread.len();
            if self.ended {
                break searched;
            }
            if searched > LONGEST_LINE {
                return Err(ReplayError::LineTooLong { file: file.to_owned(), line: self.number + 1 });
            }
            self.fill().map_err(|source| ReplayError::Read { file: file.to_owned(), source })?;
        };
        let first = self.number == 0;
        let (from, to) = (self.start, self.start + length);
        if to >= self.end && length == 0 {
            return Ok(None); // the file is over, and its last line had its end
        }
        self.start = (to + 1).min(self.end);
        self.number += 1;
        let mut line = &self.buffer[from..to];
        if first {
            line = line.strip_prefix(b"\xef\xbb\xbf").unwrap_or(line);
        }
        Ok(Some((self.number, line.strip_suffix(b"\r").unwrap_or(line))))
    }

    /// Reads on, keeping the unread part.
    fn fill(&mut self) -> std::io::Result<()> {
        self.buffer.copy_within(self.start..self.end, 0);
        self.end -= self.start;
        self.start = 0;
        if self.end == self.buffer.len() {
            self.buffer.resize(self.buffer.len() * 2, 0);
        }
        loop {
            match self.source.read(&mut self.buffer[self.end..]) {
                Ok(0) => {
                    self.ended = true;
                    return Ok(());
                }
                Ok(count) => {
                    self.end += count;
                    return Ok(());
                }
                Err(error) if error.kind() == ErrorKind::Interrupted => {}
                Err(error) => return Err(error),
            }
        }
    }
}

/// Places of the fields of a line, without blanks around them and without their quotes.
pub(super) fn split(line: &[u8], separator: u8, fields: &mut Vec<(usize, usize)>) {
    fields.clear();
    let mut from = 0;
    if memchr::memchr(b'"', line).is_none() {
        for at in memchr::memchr_iter(separator, line) {
            fields.push(trimmed(line, from, at));
            from = at + 1;
        }
        fields.push(trimmed(line, from, line.len()));
        return;
    }
    loop {
        let begin = from + line[from..].iter().take_while(|&&byte| byte == b' ').count();
        // A field in quotes ends at a quote that a separator or the line's end follows; a doubled quote stays doubled.
        let closing = (line.get(begin) == Some(&b'"'))
            .then(|| {
                memchr::memchr_iter(b'"', &line[begin + 1..])
                    .map(|at| begin + 1 + at)
                    .find(|&at| line.get(at + 1).is_none_or(|&next| next == separator))
            })
            .flatten();
        let end = match closing {
            Some(at) => {
                fields.push((begin + 1, at));
                at + 1
            }
            None => {
                let end = memchr::memchr(separator, &line[from..]).map_or(line.len(), |at| from + at);
                fields.push(trimmed(line, from, end));
                end
            }
        };
        if end >= line.len() {
            return;
        }
        from = end + 1;
    }
}

fn trimmed(line: &[u8], from: usize, to: usize) -> (usize, usize) {
    let field = &line[from..to];
    let left = field.iter().take_while(|byte| byte.is_ascii_whitespace()).count();
    let right = field[left..].iter().rev().take_while(|byte| byte.is_ascii_whitespace()).count();
    (from + left, to - right)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn fields(line: &str) -> Vec<&str> {
        let mut places = Vec::new();
        split(line.as_bytes(), b',', &mut places);
        places.into_iter().map(|(from, to)| &line[from..to]).collect()
    }

    /// Gives at most `step` bytes at a time.
    struct Drip<'a>(&'a [u8], usize);

    impl Read for Drip<'_> {
        fn read(&mut self, into: &mut [u8]) -> std::io::Result<usize> {
            let count = self.1.min(into.len()).min(self.0.len());
            into[..count].copy_from_slice(&self.0[..count]);
            self.0 = &self.0[count..];
            Ok(count)
        }
    }

    fn all_lines(bytes: &[u8], step: usize) -> Vec<(u64, Vec<u8>)> {
        let mut lines = Lines::new(Drip(bytes, step));
        let mut all = Vec::new();
        while let Some((number, line)) = lines.next(Path::new("x")).unwrap() {
            all.push((number, line.to_vec()));
        }
        all
    }

    #[test]
    fn fields_are_cut_at_separators_and_trimmed() {
        assert_eq!(fields("1,2.5,,x y "), ["1", "2.5", "", "x y"]);
        assert_eq!(fields(""), [""]);
        assert_eq!(fields(","), ["", ""]);
        assert_eq!(fields(r#""1","a, b", 3 "#), ["1", "a, b", "3"]);
        assert_eq!(fields(r#"1,"open,2"#), ["1", "\"open", "2"], "a quote that never closes is a letter");
        assert_eq!(fields(r#""a""b",1"#), [r#"a""b"#, "1"]);
        assert_eq!(fields(r#"1,"x","#), ["1", "x", ""]);
    }

    #[test]
    fn lines_end_with_either_mark_and_the_last_may_have_none() {
        let text = b"\xef\xbb\xbfa,b\r\n1,2\n\n3,4";
        for step in [1, 2, 3, 100] {
            let lines = all_lines(text, step);
            let expected: [(u64, &[u8]); 4] = [(1, b"a,b"), (2, b"1,2"), (3, b""), (4, b"3,4")];
            assert_eq!(lines.iter().map(|(n, l)| (*n, l.as_slice())).collect::<Vec<_>>(), expected, "step {step}");
        }
        assert!(all_lines(b"", 1).is_empty());
        assert_eq!(all_lines(b"a\n", 1), [(1, b"a".to_vec())]);
    }

    #[test]
    fn an_endless_line_is_refused() {
        let mut lines = Lines::new(std::io::repeat(b'x'));
        let error = lines.next(Path::new("binary.dat")).unwrap_err();
        assert_eq!(error.to_string(), "binary.dat: line 1 is longer than 1048576 bytes; is this a CSV file?");
    }

    proptest! {
        #[test]
        fn any_line_is_cut_without_panic_and_in_order(line in proptest::collection::vec(any::<u8>(), 0..60)) {
            let mut places = Vec::new();
            split(&line, b',', &mut places);
            prop_assert!(!places.is_empty());
            for pair in places.windows(2) {
                prop_assert!(pair[0].0 <= pair[0].1 && pair[0].1 < pair[1].0);
            }
            prop_assert!(places.last().unwrap().1 <= line.len());
        }

        #[test]
        fn lines_do_not_depend_on_how_the_bytes_arrive(
            bytes in proptest::collection::vec(prop_oneof![Just(b'\n'), Just(b'\r'), Just(b'a'), any::<u8>()], 0..80),
            step in 1_usize..9,
        ) {
            prop_assert_eq!(all_lines(&bytes, step), all_lines(&bytes, 1000));
        }
    }
}
