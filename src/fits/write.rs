//! Writing files that appear whole or not at all.

use super::{BLOCK, FitsError, FitsProblem, Header};
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};
use tempfile::NamedTempFile;

/// Bytes converted at a time.
const CHUNK: usize = 1 << 16;

/// Writes a FITS file, header by header, beside its final name. [`finish`](Self::finish) gives it that name; a writer
/// dropped before leaves nothing behind.
pub struct FitsWriter {
    path: PathBuf,
    temporary: NamedTempFile,
    sink: BufWriter<Box<dyn Write + Send>>,
    headers: usize,
}

impl FitsWriter {
    /// Begins a file that will replace whatever `path` names.
    ///
    /// # Errors
    /// When the folder cannot be written in.
    pub fn create(path: impl AsRef<Path>) -> Result<FitsWriter, FitsError> {
        FitsWriter::create_through(path, |file| Box::new(file))
    }

    /// As [`create`](Self::create), every byte passing through what `wrap` makes of the file: a counter, or in tests
    /// a disk that fills up.
    ///
    /// # Errors
    /// When the folder cannot be written in.
    pub fn create_through(
        path: impl AsRef<Path>,
        wrap: impl FnOnce(File) -> Box<dyn Write + Send>,
    ) -> Result<FitsWriter, FitsError> {
        let path = path.as_ref();
        let folder = match path.parent() {
            Some(folder) if !folder.as_os_str().is_empty() => folder,
            _ => Path::new("."),
        };
        let io = |action: String| move |source| FitsProblem::Io { action, source }.at(path);
        let mut builder = tempfile::Builder::new();
        builder.prefix(".writing-").suffix(".fits");
        #[cfg(unix)]
        builder.permissions(std::os::unix::fs::PermissionsExt::from_mode(0o666)); // less the umask, as any new file
        let temporary = builder.tempfile_in(folder).map_err(io(format!("write in {}", folder.display())))?;
        let file = temporary.as_file().try_clone().map_err(io("write the file".to_string()))?;
        Ok(FitsWriter {
            path: path.to_path_buf(),
            temporary,
            sink: BufWriter::with_capacity(CHUNK, wrap(file)),
            headers: 0,
        })
    }

    /// Writes an image of f32, the first axis fastest: the primary one if nothing was written before, else an IMAGE
    /// extension.
    ///
    /// # Errors
    /// When the number of pixels is not the product of the axes, a keyword is not allowed, or writing fails.
    pub fn image_f32(&mut self, header: &Header, axes: &[usize], pixels: &[f32]) -> Result<(), FitsError> {
        self.image(header, -32, axes, pixels, |value| value.to_be_bytes())
    }

    /// As [`image_f32`](Self::image_f32), of f64.
    ///
    /// # Errors
    /// As [`image_f32`](Self::image_f32).
    pub fn image_f64(&mut self, header: &Header, axes: &[usize], pixels: &[f64]) -> Result<(), FitsError> {
        self.image(header, -64, axes, pixels, |value| value.to_be_bytes())
    }

    /// Writes a primary header without data.
    ///
    /// # Errors
    /// When a keyword is not allowed, something was written before, or writing fails.
    pub fn empty_primary(&mut self, header: &Header) -> Result<(), FitsError> {
        if self.headers > 0 {
            return Err(self.unwritable("the primary header", "another before it", "it to come first"));
        }
        self.image::<f32, 4>(header, 8, &[], &[], |value| value.to_be_bytes())
    }

    fn image<T: Copy, const N: usize>(
        &mut self,
        header: &Header,
        bitpix: i64,
        axes: &[usize],
        pixels: &[T],
        swap: fn(T) -> [u8; N],
    ) -> Result<(), FitsError> {
        let product = axes.iter().try_fold(usize::from(!axes.is_empty()), |product, n| product.checked_mul(*n));
        if product != Some(pixels.len()) {
            return Err(self.unwritable(
                "an image",
                &format!("{} pixels", pixels.len()),
                &format!("axes {axes:?}"),
            ));
        }
        let mut mandatory = Header::new();
        if self.headers == 0 {
            mandatory.set("SIMPLE", true, "conforms to the FITS standard");
        } else {
            mandatory.set("XTENSION", "IMAGE", "image extension");
        }
        mandatory.set("BITPIX", bitpix, "kind of number");
        mandatory.set("NAXIS", axes.len(), "number of axes");
        for (axis, length) in axes.iter().enumerate() {
            mandatory.set(&format!("NAXIS{}", axis + 1), *length, "");
        }
        if self.headers == 0 {
            mandatory.set("EXTEND", true, "extensions may follow");
        } else {
            mandatory.set("PCOUNT", 0, "").set("GCOUNT", 1, "");
        }
        self.header(header, &mandatory)?;
        let mut bytes = Vec::with_capacity(CHUNK);
        for chunk in pixels.chunks(CHUNK / N) {
            bytes.clear();
            bytes.extend(chunk.iter().flat_map(|value| swap(*value)));
            self.bytes(&bytes)?;
        }
        self.pad(pixels.len() * N)
    }

    /// Writes a header's blocks.
    pub(super) fn header(&mut self, own: &Header, mandatory: &Header) -> Result<(), FitsError> {
        let blocks = own.to_blocks(mandatory).map_err(|problem| problem.at(&self.path))?;
        self.headers += 1;
        self.bytes(&blocks)
    }

    /// Whether anything has been written.
    pub(super) fn is_empty(&self) -> bool {
        self.headers == 0
    }

    pub(super) fn bytes(&mut self, bytes: &[u8]) -> Result<(), FitsError> {
        self.sink.write_all(bytes).map_err(|source| {
            let action = "write the file".to_string();
            FitsProblem::Io { action, source }.at(&self.path)
        })
    }

    /// Fills up the block after `written` bytes of data.
    pub(super) fn pad(&mut self, written: usize) -> Result<(), FitsError> {
        self.bytes(&[0; BLOCK][..written.next_multiple_of(BLOCK) - written])
    }

    pub(super) fn unwritable(&self, what: &str, found: &str, expected: &str) -> FitsError {
        let (what, found, expected) = (what.to_string(), found.to_string(), expected.to_string());
        FitsProblem::Unwritable { what, found, expected }.at(&self.path)
    }

    /// Puts the whole file in its place.
    ///
    /// # Errors
    /// When the last bytes cannot be written or the file cannot be renamed.
    pub fn finish(self) -> Result<(), FitsError> {
        let FitsWriter { path, temporary, mut sink, headers } = self;
        let io = |action: &str, source| FitsProblem::Io { action: action.to_string(), source }.at(&path);
        if headers == 0 {
            let (what, found) = ("a file".to_string(), "no header".to_string());
            return Err(FitsProblem::Unwritable { what, found, expected: "at least one".to_string() }.at(&path));
        }
        sink.flush().map_err(|source| io("write the file", source))?;
        drop(sink);
        // Some file systems report a full disk only here.
        temporary.as_file().sync_all().map_err(|source| io("write the file to disk", source))?;
        temporary.persist(&path).map_err(|failed| io("give the finished file its name", failed.error))?;
        Ok(())
    }
}

/// Writes a file of one f32 image, the first axis fastest.
///
/// # Errors
/// When the number of pixels is not the product of the axes, a keyword is not allowed, or writing fails.
pub fn write_image_f32(
    path: impl AsRef<Path>,
    header: &Header,
    axes: &[usize],
    pixels: &[f32],
) -> Result<(), FitsError> {
    let mut writer = FitsWriter::create(path)?;
    writer.image_f32(header, axes, pixels)?;
    writer.finish()
}

/// Writes a file of one f64 image, the first axis fastest.
///
/// # Errors
/// As [`write_image_f32`].
pub fn write_image_f64(
    path: impl AsRef<Path>,
    header: &Header,
    axes: &[usize],
    pixels: &[f64],
) -> Result<(), FitsError> {
    let mut writer = FitsWriter::create(path)?;
    writer.image_f64(header, axes, pixels)?;
    writer.finish()
}
