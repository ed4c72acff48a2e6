//! The sampler: plays a recording that the host wrote, block by block, through semihosting.
//!
//! The file (all little-endian), written by the `replay` module of the tests crate:
//!
//! ```text
//!  header   "LWREPLAY"  receiver u32  boot_id u32 (0: drawn at each start)
//!           link_bytes_per_s u32 (0: the replay waits for the link)  rate_mhz u64  skew_ns i32
//!           then twice (leg A, leg B): mantissa i32, shift u32, offset_uv i32, rail_low i32,
//!           rail_high i32, gain_ppm u32, offset_uncertainty_uv u32
//!  then deliveries until the end of the file:
//!           first_sample u64  pairs u32 (at most 256)  is_overrun u32
//!           pairs x code_a i32, pairs x code_b i32
//! ```

use core::cell::Cell;
use core::ffi::c_int;
use cortex_m_semihosting::{nr, syscall1};
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::message::{GapCause, LegScale};

const MAGIC: &[u8; 8] = b"LWREPLAY";
const LEG_BYTES: usize = 28;
const HEADER_BYTES: usize = 32 + 2 * LEG_BYTES;
const DELIVERY_BYTES: usize = 16;
/// Codes read at once: their bytes lie on the stack.
const CODES_AT_ONCE: usize = 64;

/// What kept a recording from being played.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ReplayError {
    /// No file was named on the emulator's command line, or it cannot be opened.
    NoFile,
    /// The file is not a replay file.
    WrongFile,
    /// The file ends in the middle of a delivery.
    Truncated,
}

/// A file of the host, read through semihosting.
#[derive(Debug)]
struct HostFile {
    handle: c_int,
}

impl HostFile {
    /// Opens the file named by the second word of the emulator's command line.
    fn open_argument() -> Option<Self> {
        let first_handle = [1_usize];
        // The emulator keeps files open over a reset and gives out the lowest number that is free.
        // SAFETY: SYS_CLOSE reads one word; this program has opened no file yet.
        unsafe { syscall1(nr::CLOSE, first_handle.as_ptr() as usize) };
        let mut line = [0_u8; 256];
        let mut arguments = [line.as_mut_ptr() as usize, line.len() - 1];
        // SAFETY: SYS_GET_CMDLINE writes at most the length given into `line`, which outlives the call.
        if unsafe { syscall1(nr::GET_CMDLINE, arguments.as_mut_ptr() as usize) } != 0 {
            return None;
        }
        let length = line.iter().position(|&byte| byte == 0)?;
        let space = line.iter().position(|&byte| byte == b' ')?;
        let path = line.get(space + 1..=length)?;
        let open = [path.as_ptr() as usize, 1, path.len() - 1]; // mode 1: "rb"
        // SAFETY: SYS_OPEN reads the zero-ended path, which outlives the call.
        let handle = unsafe { syscall1(nr::OPEN, open.as_ptr() as usize) } as c_int;
        (handle >= 0).then_some(Self { handle })
    }

    /// Fills `buffer`; how many bytes of it were filled.
    fn read(&mut self, buffer: &mut [u8]) -> usize {
        let arguments = [self.handle as usize, buffer.as_mut_ptr() as usize, buffer.len()];
        // SAFETY: SYS_READ writes at most the length given into `buffer`, which outlives the call.
        let missing = unsafe { syscall1(nr::READ, arguments.as_ptr() as usize) };
        buffer.len() - missing.min(buffer.len())
    }
}

/// What the file says about the run.
#[derive(Clone, Copy, Debug)]
pub struct ReplayHeader {
    /// Number of the receiver to judge by.
    pub receiver: u32,
    /// Boot id to use, so that runs can be compared byte by byte; 0: draw one.
    pub boot_id: u32,
    /// Speed of the link, which the replay does not wait for; 0: as fast as it goes, and it waits.
    pub link_bytes_per_s: u32,
}

/// A boot id that another start will not have: nanoseconds since the emulator started, never 0.
pub fn draw_boot_id() -> u32 {
    let mut elapsed_ns = [0_u32; 2];
    // SAFETY: SYS_ELAPSED writes two words, which outlive the call.
    unsafe { syscall1(nr::ELAPSED, elapsed_ns.as_mut_ptr() as usize) };
    elapsed_ns[0] | 1
}

/// The recording as a source of pairs. It waits while `may_take` is false.
#[derive(Debug)]
pub struct Replay<'a> {
    file: HostFile,
    header: ReplayHeader,
    description: SourceDescription,
    may_take: &'a Cell<bool>,
}

impl<'a> Replay<'a> {
    /// Opens the recording named on the emulator's command line.
    ///
    /// # Errors
    /// When there is none or it is not a replay file.
    pub fn open(may_take: &'a Cell<bool>) -> Result<Self, ReplayError> {
        let mut file = HostFile::open_argument().ok_or(ReplayError::NoFile)?;
        let mut header = [0; HEADER_BYTES];
        if file.read(&mut header) != HEADER_BYTES {
            return Err(ReplayError::WrongFile);
        }
        let mut fields = Fields(&header);
        if fields.take::<8>() != *MAGIC {
            return Err(ReplayError::WrongFile);
        }
        let (receiver, boot_id, link_bytes_per_s) = (fields.u32(), fields.u32(), fields.u32());
        let header = ReplayHeader { receiver, boot_id, link_bytes_per_s };
        let sample_rate_mhz = u64::from_le_bytes(fields.take());
        let skew_ns = fields.i32();
        let legs = [fields.leg(), fields.leg()];
        let description = SourceDescription { sample_rate_mhz, skew_ns, legs };
        Ok(Self { file, header, description, may_take })
    }

    /// What the file says about the run.
    pub const fn header(&self) -> ReplayHeader {
        self.header
    }

    fn read_leg(&mut self, codes: &mut [i32], pairs: usize) -> Result<(), ReplayError> {
        let mut buffer = [0; 4 * CODES_AT_ONCE];
        for codes in codes.get_mut(..pairs).unwrap_or_default().chunks_mut(CODES_AT_ONCE) {
            let bytes = buffer.get_mut(..4 * codes.len()).unwrap_or_default();
            if self.file.read(bytes) != bytes.len() {
                return Err(ReplayError::Truncated);
            }
            for (code, bytes) in codes.iter_mut().zip(bytes.as_chunks::<4>().0) {
                *code = i32::from_le_bytes(*bytes);
            }
        }
        Ok(())
    }
}

impl PairSource for Replay<'_> {
    type Error = ReplayError;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, ReplayError> {
        if !self.may_take.get() {
            return Ok(Taken::Nothing);
        }
        let mut delivery = [0; DELIVERY_BYTES];
        match self.file.read(&mut delivery) {
            0 => return Ok(Taken::Finished),
            DELIVERY_BYTES => {}
            _ => return Err(ReplayError::Truncated),
        }
        let mut fields = Fields(&delivery);
        let first_sample = u64::from_le_bytes(fields.take());
        let pairs = fields.u32() as usize;
        let gap = (fields.u32() != 0).then_some(GapCause::Overrun);
        if pairs > leg_a.len().min(leg_b.len()) {
            return Err(ReplayError::WrongFile);
        }
        self.read_leg(leg_a, pairs)?;
        self.read_leg(leg_b, pairs)?;
        Ok(Taken::Pairs { first_sample, pairs, gap })
    }
}

/// Little-endian fields from the front of a byte string; zeros past its end.
struct Fields<'a>(&'a [u8]);

impl Fields<'_> {
    fn take<const N: usize>(&mut self) -> [u8; N] {
        match self.0.split_first_chunk() {
            Some((field, rest)) => {
                self.0 = rest;
                *field
            }
            None => [0; N],
        }
    }

    fn u32(&mut self) -> u32 {
        u32::from_le_bytes(self.take())
    }

    fn i32(&mut self) -> i32 {
        i32::from_le_bytes(self.take())
    }

    fn leg(&mut self) -> LegScale {
        LegScale {
            mantissa: self.i32(),
            shift: self.u32() as u8,
            offset_uv: self.i32(),
            rail_low_code: self.i32(),
            rail_high_code: self.i32(),
            gain_uncertainty_ppm: self.u32(),
            offset_uncertainty_uv: self.u32(),
        }
    }
}
