//! The messages between the daemon and a reader: frames of a checked length and checksum.
//!
//! A frame is `EMBR`, the version (u32), the length of the payload (u64, all little-endian), the
//! first 16 bytes of the payload's BLAKE3, and the payload. Numbers travel as the bits they are, so that a
//! spectrum arrives exactly; [`crate::spectrum::Spectrum`] checks itself again when it is unpacked.
//! The daemon trusts nothing of a reader: a wrong frame, or one longer than a reader's memory, is an
//! error, and so is a code that is not in the table.

use std::io::{self, Read, Write};

use serde::de::DeserializeOwned;
use serde::{Deserialize, Serialize};

use crate::codes::{self, Disposition};
use crate::report::error_chain;
use crate::spectrum::{ObjectRecord, Observation, ReadFault, ReadSettings, Refusal, SourceRecord};

const START: [u8; 4] = *b"EMBR";
const VERSION: u32 = 1;
const CHECK_BYTES: usize = 16;
/// Bytes before the payload.
pub const FRAME_HEAD_BYTES: usize = 4 + 4 + 8 + CHECK_BYTES;
/// Longest message to a reader: settings of many instruments, or a path, take less.
pub const LONGEST_REQUEST_BYTES: u64 = 4 << 20;

/// What a reader may use.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Limits {
    /// Address space, bytes.
    pub memory_bytes: u64,
    /// Time for one file, s.
    pub time_s: f64,
}

/// The first message to a reader. The settings are JSON, because what is written for people may leave
/// out keys, which the compact form could not read back.
#[derive(Debug, Serialize, Deserialize)]
pub struct Orders {
    /// What is taken for granted about files.
    pub settings_json: String,
    /// What it may use.
    pub limits: Limits,
}

impl Orders {
    /// Packs settings and limits.
    pub fn new(settings: &ReadSettings, limits: Limits) -> io::Result<Self> {
        Ok(Orders { settings_json: serde_json::to_string(settings)?, limits })
    }

    /// The settings.
    pub fn settings(&self) -> io::Result<ReadSettings> {
        Ok(serde_json::from_str(&self.settings_json)?)
    }
}

/// One file to read; its descriptor travels beside the message.
#[derive(Debug, Serialize, Deserialize)]
pub struct Request {
    /// For the records only; a reader cannot open it.
    pub shown_path: String,
}

/// How far a reader could lock itself in.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Containment {
    /// Whether the kernel's Landlock keeps it from every file and port.
    pub has_landlock: bool,
    /// Whether a filter keeps it from every system call that it does not need.
    pub has_seccomp: bool,
    /// Whether its memory is limited.
    pub has_memory_limit: bool,
    /// What was missing, in words.
    pub missing: Vec<String>,
}

/// What a reader says. Answers to one request: `Read` and `Refused` in the file's order, then `Done`.
#[derive(Debug, Serialize, Deserialize)]
pub enum Reply {
    /// Locked in and ready for files.
    Ready(Containment),
    /// One spectrum.
    Read(Box<Observation>),
    /// One object, or the whole file, that cannot be read.
    Refused(Box<Refused>),
    /// That was all of the file.
    Done,
}

/// A [`Refusal`] on its way.
#[derive(Debug, Serialize, Deserialize)]
pub struct Refused {
    object: ObjectRecord,
    source: SourceRecord,
    code: String,
    disposition: ToldDisposition,
    detail: String,
}

#[derive(Debug, Clone, Copy, Serialize, Deserialize)]
enum ToldDisposition {
    Retry,
    Reject,
}

impl From<Refusal> for Refused {
    fn from(refusal: Refusal) -> Self {
        let Refusal { object, source, fault } = refusal;
        let disposition = match fault.disposition() {
            Disposition::Retry => ToldDisposition::Retry,
            // A reader sees one file, which is no reason to stop the daemon.
            Disposition::Reject | Disposition::Stop => ToldDisposition::Reject,
        };
        let (code, detail) = (fault.code().id.to_owned(), error_chain(&fault));
        Refused { object, source, code, disposition, detail }
    }
}

impl Refused {
    /// The refusal in this process.
    ///
    /// # Errors
    /// Its code is not in the table.
    pub fn into_refusal(self) -> io::Result<Box<Refusal>> {
        let code = codes::find(&self.code).ok_or_else(|| invalid("found an unknown code"))?;
        let disposition = match self.disposition {
            ToldDisposition::Retry => Disposition::Retry,
            ToldDisposition::Reject => Disposition::Reject,
        };
        let fault = ReadFault::Told { code, disposition, detail: self.detail };
        Ok(Box::new(Refusal { object: self.object, source: self.source, fault }))
    }
}

/// Packs a message into a frame.
pub fn to_frame(message: &impl Serialize) -> io::Result<Vec<u8>> {
    let room = vec![0; FRAME_HEAD_BYTES];
    let mut frame = postcard::to_extend(message, room).map_err(io::Error::other)?;
    let (head, payload) = frame.split_at_mut(FRAME_HEAD_BYTES);
    head[..4].copy_from_slice(&START);
    head[4..8].copy_from_slice(&VERSION.to_le_bytes());
    head[8..16].copy_from_slice(&(payload.len() as u64).to_le_bytes());
    head[16..].copy_from_slice(&check(payload));
    Ok(frame)
}

/// Writes a message.
pub fn write(target: &mut impl Write, message: &impl Serialize) -> io::Result<()> {
    target.write_all(&to_frame(message)?)
}

/// Reads a message of at most `longest_bytes`, whose head was read already; gives the length of its
/// payload too.
///
/// # Errors
/// The connection ended (`UnexpectedEof`), or what came is no message (`InvalidData`).
pub fn read_after<M: DeserializeOwned>(
    head: &[u8; FRAME_HEAD_BYTES],
    source: &mut impl Read,
    longest_bytes: u64,
) -> io::Result<(M, u64)> {
    if head[..4] != START || head[4..8] != VERSION.to_le_bytes() {
        return Err(invalid("found something else than a message"));
    }
    let mut length = [0; 8];
    length.copy_from_slice(&head[8..16]);
    let length = u64::from_le_bytes(length);
    if length > longest_bytes {
        return Err(invalid("found a message longer than the limit"));
    }
    let mut payload = vec![0; usize::try_from(length).map_err(io::Error::other)?];
    source.read_exact(&mut payload)?;
    if head[16..] != check(&payload) {
        return Err(invalid("found a message whose checksum is wrong"));
    }
    let (message, rest) = postcard::take_from_bytes(&payload)
        .map_err(|error| invalid(&format!("found a message that does not unpack: {error}")))?;
    if !rest.is_empty() {
        return Err(invalid("found a message with something behind it"));
    }
    Ok((message, length))
}

/// Reads a message of at most `longest_bytes`.
///
/// # Errors
/// As [`read_after`].
pub fn read<M: DeserializeOwned>(source: &mut impl Read, longest_bytes: u64) -> io::Result<(M, u64)> {
    let mut head = [0; FRAME_HEAD_BYTES];
    source.read_exact(&mut head)?;
    read_after(&head, source, longest_bytes)
}

fn check(payload: &[u8]) -> [u8; CHECK_BYTES] {
    let mut check = [0; CHECK_BYTES];
    check.copy_from_slice(&blake3::hash(payload).as_bytes()[..CHECK_BYTES]);
    check
}

fn invalid(detail: &str) -> io::Error {
    io::Error::new(io::ErrorKind::InvalidData, detail)
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use crate::spectrum::{Instrument, Resolution, Spectrum};

    fn observation() -> Observation {
        let wave: Vec<f64> = (0..60).map(|pixel| 4000.0 + 1.1 * f64::from(pixel)).collect();
        let flux: Vec<f64> = wave.iter().map(|wave| (wave / 7.0).sin() * 1e-17).collect();
        let mut sigma: Vec<f64> = flux.iter().map(|flux| 0.1 * flux.abs() + f64::MIN_POSITIVE).collect();
        sigma[7] = f64::NAN;
        let widths = wave.iter().map(|wave| wave / 1800.0).collect();
        let is_good: Vec<bool> = (0..60).map(|pixel| pixel % 9 != 0).collect();
        let resolution = Resolution::FwhmPerPixelAa(widths);
        let spectrum = Spectrum::new(wave, flux, sigma, is_good, resolution, true).unwrap();
        let (object, source) = (ObjectRecord::default(), SourceRecord::default());
        Observation { spectrum, object, source, flags: Vec::new() }
    }

    #[test]
    fn a_spectrum_arrives_bit_by_bit() {
        let sent = observation();
        let frame = to_frame(&Reply::Read(Box::new(sent.clone()))).unwrap();
        let (reply, _): (Reply, u64) = read(&mut frame.as_slice(), 1 << 20).unwrap();
        let Reply::Read(found) = reply else { panic!("another kind of reply") };
        assert_eq!(*found, sent);
        assert_eq!(found.spectrum.sigma()[7], f64::INFINITY);
        assert_eq!(found.spectrum.bad_pixels(), sent.spectrum.bad_pixels());
    }

    #[test]
    fn every_changed_byte_is_noticed() {
        let frame = to_frame(&Reply::Read(Box::new(observation()))).unwrap();
        for at in 0..frame.len() {
            let mut changed = frame.clone();
            changed[at] ^= 0x10;
            assert!(read::<Reply>(&mut changed.as_slice(), 1 << 20).is_err(), "byte {at}");
        }
        for length in 0..frame.len() {
            assert!(read::<Reply>(&mut &frame[..length], 1 << 20).is_err(), "cut at {length}");
        }
        assert!(read::<Reply>(&mut frame.as_slice(), 100).is_err());
    }

    #[test]
    fn a_message_of_anything_does_no_harm() {
        use rand::{Rng, RngExt, SeedableRng};
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(7);
        let good = postcard::to_allocvec(&Reply::Read(Box::new(observation()))).unwrap();
        let mut unpacked = 0;
        for round in 0..20_000 {
            let mut payload = good.clone();
            if round % 2 == 0 {
                payload.truncate(random.random_range(1..200));
                random.fill_bytes(&mut payload);
                payload[0] %= 4;
            } else {
                let at = random.random_range(0..payload.len());
                payload[at] = payload[at].wrapping_add(random.random_range(1..=255));
            }
            // With a checksum that is right, as a reader taken over by a file could send.
            let mut frame = vec![0; FRAME_HEAD_BYTES];
            frame[..4].copy_from_slice(&START);
            frame[4..8].copy_from_slice(&VERSION.to_le_bytes());
            frame[8..16].copy_from_slice(&(payload.len() as u64).to_le_bytes());
            frame[16..].copy_from_slice(&check(&payload));
            frame.extend_from_slice(&payload);
            unpacked += usize::from(read::<Reply>(&mut frame.as_slice(), 1 << 20).is_ok());
        }
        assert!(unpacked > 100, "{unpacked}");
    }

    #[test]
    fn a_spectrum_that_breaks_its_promises_does_not_unpack() {
        let sent = observation();
        let mut turned: Vec<f64> = sent.spectrum.wave_vac_aa().to_vec();
        turned.reverse();
        let good = postcard::to_allocvec(&sent.spectrum).unwrap();
        let mut bad = good.clone();
        // Two bytes of length, then the wavelengths.
        for (pixel, wave) in turned.iter().enumerate() {
            bad[2 + 8 * pixel..10 + 8 * pixel].copy_from_slice(&wave.to_le_bytes());
        }
        assert!(postcard::from_bytes::<Spectrum>(&good).is_ok());
        assert!(postcard::from_bytes::<Spectrum>(&bad).is_err());
    }

    #[test]
    fn settings_survive() {
        let mut settings = ReadSettings { row: Some(3), ..ReadSettings::default() };
        settings.assume.resolution_fwhm_aa = Some(2.400_000_000_000_000_4);
        let section =
            Instrument { name: "KFS-1".to_owned(), error_scale: Some(1.1), ..Instrument::default() };
        settings.instruments.push(section);
        let orders = Orders::new(&settings, Limits { memory_bytes: 1, time_s: 0.1 }).unwrap();
        assert_eq!(orders.settings().unwrap(), settings);
    }
}
