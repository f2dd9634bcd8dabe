//! Opening a file: its headers, and where their data lie.

use super::big_endian::NumberKind;
use super::{BLOCK, CARD, FitsError, FitsProblem, Header};
use std::fs::File;
use std::io;
use std::path::{Path, PathBuf};

/// A longer header (nearly 12 MB) is taken for damage.
const HEADER_BLOCKS: u64 = 4096;
/// How far behind the last header and data a stray header is looked for.
const SEARCH_BYTES: u64 = 64 << 20;

/// What kind of data follow a header.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum HduKind {
    /// An image, primary or extension; also an empty primary.
    Image,
    /// Random groups (FITS Standard 4.0, §6).
    Groups,
    /// A binary table.
    BinaryTable,
    /// Any other extension: skipped.
    Other,
}

/// A header and its data.
#[derive(Debug, Clone)]
pub struct Hdu {
    /// The header.
    pub header: Header,
    /// What the data are.
    pub kind: HduKind,
    /// Kind of number.
    pub number: NumberKind,
    /// NAXIS1, NAXIS2, … (the first is 0 for random groups).
    pub axes: Vec<u64>,
    /// PCOUNT.
    pub pcount: u64,
    /// GCOUNT.
    pub gcount: u64,
    /// Position of the data in the file, bytes.
    pub data_start: u64,
    /// Length of the data without padding, bytes: checked to lie inside the file.
    pub data_bytes: u64,
}

impl Hdu {
    /// EXTNAME, without trailing blanks; empty when there is none.
    pub fn name(&self) -> String {
        self.header.text("EXTNAME").ok().flatten().unwrap_or_default()
    }

    /// EXTVER; 1 when it is absent or not a number.
    pub fn version(&self) -> i64 {
        self.header.integer("EXTVER").ok().flatten().unwrap_or(1)
    }
}

/// An open FITS file.
#[derive(Debug)]
pub struct FitsFile {
    path: PathBuf,
    file: File,
    length: u64,
    hdus: Vec<Hdu>,
    notes: Vec<String>,
}

impl FitsFile {
    /// Opens a file and reads all its headers. The name is taken literally.
    ///
    /// # Errors
    /// When it cannot be opened, is not FITS, is compressed, or a header is damaged or declares data beyond its end.
    pub fn open(path: impl AsRef<Path>) -> Result<FitsFile, FitsError> {
        let path = path.as_ref();
        let io = |action: &str| {
            let action = action.to_string();
            move |source| FitsProblem::Io { action, source }.at(path)
        };
        // Looked at before it is opened: opening a pipe would wait for a writer.
        let meta = std::fs::metadata(path).map_err(io("open the file"))?;
        if !meta.is_file() {
            return Err(FitsProblem::NotAFile.at(path));
        }
        let file = File::open(path).map_err(io("open the file"))?;
        let length = file.metadata().map_err(io("ask for the file's length"))?.len();
        let mut fits = FitsFile { path: path.to_path_buf(), file, length, hdus: Vec::new(), notes: Vec::new() };
        fits.scan().map_err(|problem| problem.at(path))?;
        Ok(fits)
    }

    /// The path it was opened by.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Length of the file, bytes.
    pub fn length(&self) -> u64 {
        self.length
    }

    /// All headers, in order.
    pub fn hdus(&self) -> &[Hdu] {
        &self.hdus
    }

    /// Oddities that do not keep the file from being read.
    pub fn notes(&self) -> &[String] {
        &self.notes
    }

    /// Fills `buffer` from a position in the file.
    ///
    /// # Errors
    /// When the file has become too short or cannot be read.
    pub fn read_at(&self, start: u64, buffer: &mut [u8]) -> Result<(), FitsError> {
        self.read(start, buffer).map_err(|problem| problem.at(&self.path))
    }

    fn read(&self, start: u64, buffer: &mut [u8]) -> Result<(), FitsProblem> {
        read_exact_at(&self.file, buffer, start).map_err(|source| FitsProblem::Read {
            start,
            end: start.saturating_add(buffer.len() as u64),
            source,
        })
    }

    fn scan(&mut self) -> Result<(), FitsProblem> {
        self.check_beginning()?;
        let mut position = 0;
        while position < self.length {
            if !self.hdus.is_empty() && !self.begins_extension(position)? {
                self.judge_rest(position)?;
                break;
            }
            let hdu = self.read_hdu(position)?;
            let end = hdu.data_start + hdu.data_bytes; // checked in read_hdu
            position = end.next_multiple_of(BLOCK as u64);
            if position > self.length {
                self.notes.push(format!("{}: the last block of data is not filled up", hdu.header.label()));
            }
            self.hdus.push(hdu);
        }
        Ok(())
    }

    fn check_beginning(&self) -> Result<(), FitsProblem> {
        if self.length == 0 {
            return Err(FitsProblem::Empty);
        }
        let mut first = vec![0; self.length.min(CARD as u64) as usize];
        self.read(0, &mut first)?;
        for (magic, kind) in [
            (&b"\x1f\x8b"[..], "gzip"),
            (b"BZh", "bzip2"),
            (b"\xfd7zXZ", "xz"),
            (b"\x1f\x9d", "lzw"),
            (b"\x28\xb5\x2f\xfd", "zstd"),
        ] {
            if first.starts_with(magic) {
                return Err(FitsProblem::Compressed { kind });
            }
        }
        if !first.starts_with(b"SIMPLE  =") {
            let found = String::from_utf8_lossy(&first[..first.len().min(16)]).into_owned();
            return Err(FitsProblem::NotFits { found });
        }
        Ok(())
    }

    fn begins_extension(&self, position: u64) -> Result<bool, FitsProblem> {
        if self.length - position < CARD as u64 {
            return Ok(false);
        }
        let mut start = [0; 9];
        self.read(position, &mut start)?;
        Ok(&start == b"XTENSION=")
    }

    /// Bytes behind the last data may be special records, which the standard allows; but if a header follows, the
    /// sizes in the header before it are wrong.
    fn judge_rest(&mut self, position: u64) -> Result<(), FitsProblem> {
        let label = self.hdus.last().map_or(String::new(), |hdu| hdu.header.label().to_string());
        let end = self.length.min(position.saturating_add(SEARCH_BYTES));
        let mut chunk = vec![0; 256 * BLOCK];
        let mut at = position;
        while at < end {
            let size = (end - at).min(chunk.len() as u64) as usize;
            self.read(at, &mut chunk[..size])?;
            for (block, bytes) in chunk[..size].chunks(BLOCK).enumerate() {
                if bytes.starts_with(b"XTENSION=") {
                    return Err(FitsProblem::Gap { hdu: label, end: position, next: at + (block * BLOCK) as u64 });
                }
            }
            at += size as u64;
        }
        self.notes.push(format!(
            "{label}: {} bytes follow its data that no header describes; they are not read",
            self.length - position
        ));
        Ok(())
    }

    fn read_hdu(&self, position: u64) -> Result<Hdu, FitsProblem> {
        let label = match self.hdus.len() {
            0 => "primary header".to_string(),
            n => format!("extension {n}"),
        };
        let bytes = self.read_header_bytes(position, &label)?;
        let mut header = Header::parse(&bytes, label.clone())?;
        if let Ok(Some(name)) = header.text("EXTNAME") {
            header.set_label(format!("{label} ({name})"));
        }
        self.layout(header, position + bytes.len() as u64)
    }

    /// The bytes of a header, to the end of the block of its END card.
    fn read_header_bytes(&self, position: u64, label: &str) -> Result<Vec<u8>, FitsProblem> {
        let available = (self.length - position) / BLOCK as u64;
        let mut bytes = Vec::new();
        for _ in 0..available.min(HEADER_BLOCKS) {
            let start = bytes.len();
            bytes.resize(start + BLOCK, 0);
            self.read(position + start as u64, &mut bytes[start..])?;
            if bytes[start..].chunks_exact(CARD).any(|card| card.starts_with(b"END     ")) {
                let end = bytes[start..].chunks_exact(CARD).position(|card| card.starts_with(b"END     "));
                let cards = start + end.unwrap_or(0) * CARD;
                // Cards behind END are padding: blank them, so that nothing in them is taken for a keyword.
                bytes[cards..].fill(b' ');
                return Ok(bytes);
            }
        }
        Err(FitsProblem::HeaderUnfinished {
            hdu: label.to_string(),
            blocks: available.min(HEADER_BLOCKS),
            reason: if available < HEADER_BLOCKS {
                "the file is cut short"
            } else {
                "no sound header is that long"
            },
        })
    }

    /// Sizes from the mandatory keywords, checked against the file.
    fn layout(&self, header: Header, data_start: u64) -> Result<Hdu, FitsProblem> {
        let primary = self.hdus.is_empty();
        if primary && header.logical("SIMPLE")? != Some(true) {
            return Err(header.complain("SIMPLE", "T"));
        }
        let bitpix = header.integer("BITPIX")?;
        let number = bitpix
            .and_then(NumberKind::from_bitpix)
            .ok_or_else(|| header.complain("BITPIX", "8, 16, 32, 64, -32 or -64"))?;
        let naxis = header.count("NAXIS")?;
        if naxis > 999 {
            return Err(header.complain("NAXIS", "0 to 999"));
        }
        let axes: Vec<u64> = (1..=naxis).map(|n| header.count(&format!("NAXIS{n}"))).collect::<Result<_, _>>()?;
        let groups = primary && axes.first() == Some(&0) && header.logical("GROUPS")? == Some(true);
        let (pcount, gcount) = match (primary, groups) {
            (true, false) => (0, 1),
            (true, true) => (header.count("PCOUNT")?, header.count("GCOUNT")?),
            (false, _) => (
                if header.get("PCOUNT").is_some() { header.count("PCOUNT")? } else { 0 },
                if header.get("GCOUNT").is_some() { header.count("GCOUNT")? } else { 1 },
            ),
        };
        let kind = match (primary, header.text("XTENSION")?.as_deref()) {
            (true, _) if groups => HduKind::Groups,
            (true, _) | (false, Some("IMAGE")) => HduKind::Image,
            (false, Some("BINTABLE")) => HduKind::BinaryTable,
            (false, _) => HduKind::Other,
        };
        let cells = if axes.is_empty() {
            Some(0)
        } else {
            axes[usize::from(groups)..].iter().try_fold(1u64, |product, n| product.checked_mul(*n))
        };
        let data_bytes = cells
            .and_then(|cells| cells.checked_add(pcount))
            .and_then(|numbers| numbers.checked_mul(gcount))
            .and_then(|numbers| numbers.checked_mul(number.size() as u64))
            .filter(|bytes| data_start.checked_add(*bytes).is_some_and(|end| end <= u64::MAX - BLOCK as u64));
        let declared = data_bytes.unwrap_or(u64::MAX);
        if data_bytes.is_none() || declared > self.length - data_start {
            let hdu = header.label().to_string();
            return Err(FitsProblem::Truncated { hdu, declared, start: data_start, length: self.length });
        }
        Ok(Hdu { header, kind, number, axes, pcount, gcount, data_start, data_bytes: declared })
    }
}

#[cfg(unix)]
fn read_exact_at(file: &File, buffer: &mut [u8], start: u64) -> io::Result<()> {
    std::os::unix::fs::FileExt::read_exact_at(file, buffer, start)
}

#[cfg(windows)]
fn read_exact_at(file: &File, mut buffer: &mut [u8], mut start: u64) -> io::Result<()> {
    while !buffer.is_empty() {
        match std::os::windows::fs::FileExt::seek_read(file, buffer, start) {
            Ok(0) => return Err(io::ErrorKind::UnexpectedEof.into()),
            Ok(n) => {
                buffer = &mut buffer[n..];
                start += n as u64;
            }
            Err(e) if e.kind() == io::ErrorKind::Interrupted => {}
            Err(e) => return Err(e),
        }
    }
    Ok(())
}
