//! How deep the image's stack has reached, without a line of code in the image.
//!
//! The free memory between the image's data and its stack's start (the linker symbols `__sheap` and `_stack_start`)
//! is filled with a pattern before reset. The stack grows down into it; later the lowest byte that has changed marks
//! the deepest point so far: `used = _stack_start - lowest`.
//!
//! Where it stops being true: it is the deepest of what has run, no bound; and a stack frame whose lowest words were
//! reserved but never written, or written with the pattern, is seen a few bytes too shallow.

use std::path::Path;

use object::{Object, ObjectSymbol};

use super::{EmulatorError, io_error, monitor::Monitor};

/// What free memory is filled with. No address of this board and no small number contains it.
const PATTERN: u8 = 0xa5;

/// Memory of a running image, in bytes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
pub struct StackUse {
    /// Deepest reach of the stack since reset.
    pub deepest: u32,
    /// What the stack could take before it met the image's data.
    pub available: u32,
}

/// The memory that is painted.
#[derive(Clone, Copy, Debug)]
pub(super) struct Painted {
    from: u32,
    to: u32,
}

impl Painted {
    /// Looks up the free memory of an image.
    pub(super) fn of(image: &Path) -> Result<Self, EmulatorError> {
        let bad = |reason: String| EmulatorError::BadImage { path: image.to_path_buf(), reason };
        let bytes = std::fs::read(image).map_err(io_error("read the controller image"))?;
        let file = object::File::parse(&*bytes).map_err(|error| bad(error.to_string()))?;
        let address = |name: &str| {
            let symbol = file.symbols().find(|symbol| symbol.name() == Ok(name));
            symbol
                .and_then(|symbol| u32::try_from(symbol.address()).ok())
                .ok_or_else(|| bad(format!("it has no symbol {name}; is it stripped?")))
        };
        let painted = Self { from: address("__sheap")?, to: address("_stack_start")? };
        if painted.from >= painted.to {
            return Err(bad(format!("its stack at {:#x} does not lie above its data", painted.to)));
        }
        Ok(painted)
    }

    fn size(self) -> u32 {
        self.to - self.from
    }

    /// Writes the paint to `file` and returns QEMU's option that applies it.
    pub(super) fn option(self, file: &Path) -> Result<String, EmulatorError> {
        std::fs::write(file, vec![PATTERN; self.size() as usize]).map_err(io_error("write the stack's paint"))?;
        Ok(format!("loader,file={},addr={:#x},force-raw=on", file.display(), self.from))
    }

    /// Looks how much paint is left; the board stands still meanwhile.
    pub(super) fn measure(self, monitor: &mut Monitor, copy: &Path) -> Result<StackUse, EmulatorError> {
        monitor.command("stop", &serde_json::json!({}))?;
        let saved = monitor
            .command("pmemsave", &serde_json::json!({ "val": self.from, "size": self.size(), "filename": copy }));
        monitor.command("cont", &serde_json::json!({}))?;
        saved?;
        let memory = std::fs::read(copy).map_err(io_error("read the copy of the board's memory"))?;
        Ok(StackUse { deepest: used(&memory), available: self.size() })
    }
}

/// Bytes from the lowest changed one to the end.
fn used(memory: &[u8]) -> u32 {
    let untouched = memory.iter().take_while(|&&byte| byte == PATTERN).count();
    u32::try_from(memory.len() - untouched).unwrap_or(u32::MAX)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_lowest_change_counts_even_below_untouched_bytes() {
        assert_eq!(used(&[PATTERN; 64]), 0);
        let mut memory = [PATTERN; 64];
        memory[63] = 0;
        assert_eq!(used(&memory), 1);
        memory[10] = 1;
        assert_eq!(used(&memory), 54);
        memory[0] = 1;
        assert_eq!(used(&memory), 64);
    }

    #[test]
    fn what_is_no_image_is_refused_by_name() {
        let file = tempfile::NamedTempFile::new().unwrap();
        std::fs::write(file.path(), "not an ELF file").unwrap();
        let error = Painted::of(file.path()).unwrap_err().to_string();
        assert!(error.starts_with(&format!("{} is no controller image: ", file.path().display())), "{error}");
    }
}
