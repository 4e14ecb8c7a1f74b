//! The two flash pages that hold what the image is not built with: the machine profile, and who this controller is.
//!
//! Layout, ours: at [`PROFILE`] a length (u32, little endian), then that many bytes of profile; at [`IDENTITY`] the boot
//! number (u64, little endian), then the controller's name ([`NAME_BYTES`] bytes of UTF-8, filled up with zeroes).
//! Under emulation QEMU's loader fills both before reset; on silicon a profile upload writes the first and start-up
//! counts the boot number. An erased page (all ones) or an empty one (all zeroes) means that there is none of these.

#![allow(unsafe_code)]

use offcurve_core::link::message::NAME_BYTES;

/// Address of the profile page.
const PROFILE: usize = 0x0030_0000;
/// Size of the profile page in bytes, length field included.
const PROFILE_SIZE: usize = 4096;
/// Address of the identity page.
const IDENTITY: usize = 0x0030_1000;
/// Bytes of the boot number.
const BOOT_BYTES: usize = 8;

/// The stored profile's bytes, unchecked except for their length. `None`: the page is empty or its length is absurd.
pub(crate) fn profile() -> Option<&'static [u8]> {
    // SAFETY: the page is mapped memory above the image (memory.x), and nothing in this image writes to it, so a
    // shared reference to plain bytes is valid for the whole run.
    let page: &'static [u8; PROFILE_SIZE] = unsafe { &*(PROFILE as *const [u8; PROFILE_SIZE]) };
    let (length, rest) = page.split_first_chunk::<4>()?;
    let length = usize::try_from(u32::from_le_bytes(*length)).ok()?;
    if length == 0 { None } else { rest.get(..length) }
}

fn identity() -> &'static [u8; BOOT_BYTES + NAME_BYTES] {
    // SAFETY: as for `profile`.
    unsafe { &*(IDENTITY as *const [u8; BOOT_BYTES + NAME_BYTES]) }
}

/// The stored boot number. `None`: none is stored.
pub(crate) fn boot() -> Option<u64> {
    let number = u64::from_le_bytes(*identity().first_chunk()?);
    if number == 0 || number == u64::MAX { None } else { Some(number) }
}

/// The stored name. `None`: none is stored, or it is not UTF-8 (an erased page is not).
pub(crate) fn name() -> Option<&'static str> {
    let bytes = identity().get(BOOT_BYTES..)?;
    let length = bytes.iter().position(|&byte| byte == 0).unwrap_or(NAME_BYTES);
    let name = core::str::from_utf8(bytes.get(..length)?).ok()?;
    if name.is_empty() { None } else { Some(name) }
}
