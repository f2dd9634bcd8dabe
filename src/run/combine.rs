//! The fields file of `combine`: images of single fields, what their noise is, and the pixels wanted.

use super::document::{At, Document, Section, number, text};
use super::image::read_grid;
use super::{Problem, RunError, file_problem, read_text};
use crate::sky::ImageGeometry;
use serde::Serialize;
use std::path::{Path, PathBuf};

/// How deep a field is.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Depth {
    /// A FITS image of inverse variances, (Jy/beam)⁻².
    Weight(At<PathBuf>),
    /// A FITS image of standard deviations, Jy/beam.
    Noise(At<PathBuf>),
    /// One standard deviation for all pixels, Jy/beam.
    NoiseJy(f64),
}

/// One entry `[[field]]`.
#[derive(Debug, Clone, Serialize)]
pub struct FieldEntry {
    /// Line of the entry.
    #[serde(skip)]
    pub line: usize,
    /// Its key with its number, for messages.
    #[serde(skip)]
    pub key: String,
    /// The image, relative paths resolved.
    pub image: At<PathBuf>,
    /// Its noise.
    pub depth: Depth,
}

impl FieldEntry {
    /// The files it names: key, file and line.
    pub fn files(&self) -> Vec<(&'static str, &At<PathBuf>)> {
        let map = match &self.depth {
            Depth::Weight(file) => Some(("weight", file)),
            Depth::Noise(file) => Some(("noise", file)),
            Depth::NoiseJy(_) => None,
        };
        std::iter::once(("image", &self.image)).chain(map).collect()
    }
}

/// A fields file, checked; all files that it names exist.
#[derive(Debug, Clone, Serialize)]
pub struct FieldsFile {
    /// Where it was read from.
    pub path: PathBuf,
    /// Title, for pictures and the summary.
    pub title: Option<String>,
    /// Entries `[[field]]`; at least one.
    pub fields: Vec<FieldEntry>,
    /// The pixels of `[image]`; `None` leaves them to the fields.
    pub image: Option<ImageGeometry>,
}

impl FieldsFile {
    /// Reads and checks a fields file.
    ///
    /// # Errors
    /// [`RunError`] with everything that is wrong, files that are not there among it.
    pub fn read(path: &Path) -> Result<FieldsFile, RunError> {
        FieldsFile::parse(path, &read_text(path)?)
    }

    /// Checks the text of a fields file that is, or could be, at `path`.
    ///
    /// # Errors
    /// As [`FieldsFile::read`].
    pub fn parse(path: &Path, content: &str) -> Result<FieldsFile, RunError> {
        let document = Document::new(path, content);
        let table = document.parse()?;
        let root = Section::root(&document, &table);
        let title = root.optional("title", "a title, in quotes", text).map(|at| at.value);
        let fields: Vec<FieldEntry> = root.tables("field").iter().filter_map(read_field).collect();
        let image = root.table("image").and_then(|section| {
            let grid = read_grid(&section);
            section.finish();
            grid
        });
        root.finish();
        if !root.has("field") {
            let expected = "at least one entry [[field]] with image = \"FILE\" and its noise".to_owned();
            document.complain(1, "field", Problem::Missing { expected });
        }
        for field in &fields {
            for (key, file) in field.files() {
                if let Some(problem) = file_problem(&file.value) {
                    let problem = Problem::File { file: file.value.clone(), problem, expected: "a FITS image" };
                    document.complain(file.line, format!("{}.{key}", field.key), problem);
                }
            }
        }
        let found = FieldsFile { path: path.to_owned(), title, fields, image };
        document.failure().map_or(Ok(found), Err)
    }
}

fn read_field(section: &Section) -> Option<FieldEntry> {
    let file = |at: At<String>| At { value: section.document.resolve(&at.value), line: at.line };
    let image = section.required("image", "the name of a FITS image in Jy/beam", text).map(file);
    let weight = section.optional("weight", "the name of a FITS image of inverse variances, (Jy/beam)⁻²", text);
    let noise = section.optional("noise", "the name of a FITS image of standard deviations, Jy/beam", text);
    let constant =
        section.optional("noise_jy", "a standard deviation in Jy/beam, greater than 0", number(|v| v > 0.0));
    let stated: Vec<&str> = ["weight", "noise", "noise_jy"].into_iter().filter(|key| section.has(key)).collect();
    section.finish();
    let one =
        "one of weight = \"FILE\" (inverse variance), noise = \"FILE\" (standard deviation) and noise_jy = NUMBER";
    match stated[..] {
        [_] => {}
        [] => section.complain(section.line, "weight", Problem::Missing { expected: one.to_owned() }),
        [_, second, ..] => {
            let problem = Problem::Conflict { found: stated.join(" and "), expected: one.to_owned() };
            section.complain(section.line_of(second), second, problem);
        }
    }
    let depth = match (weight, noise, constant) {
        (Some(weight), None, None) => Depth::Weight(file(weight)),
        (None, Some(noise), None) => Depth::Noise(file(noise)),
        (None, None, Some(constant)) => Depth::NoiseJy(constant.value),
        _ => return None,
    };
    Some(FieldEntry { line: section.line, key: section.name.clone(), image: image?, depth })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn refused(text: &str) -> String {
        FieldsFile::parse(Path::new("fields.toml"), text).unwrap_err().to_string()
    }

    #[test]
    fn what_is_wrong_is_told_with_line_and_key() {
        for (text, said) in [
            ("", "fields.toml:1: field: missing; expected at least one entry [[field]]"),
            ("[[field]]\nnoise_jy = 1.0\n", "fields.toml:1: field.image: missing"),
            ("[[field]]\nimage = 'a'\n", "fields.toml:1: field.weight: missing; expected one of weight"),
            ("[[field]]\nimage = 'a'\nnoise_jy = 0\n", "fields.toml:3: field.noise_jy: found the number 0"),
            (
                "[[field]]\nimage = 'a'\nnoise = 'b'\nweight = 'c'\n",
                "fields.toml:3: field.noise: weight and noise; expected one of",
            ),
            ("[[field]]\nimage = 'a'\nwieght = 'c'\n", "field.wieght: unknown key (did you mean \"weight\"?)"),
            (
                "[[field]]\nimage = 'no such.fits'\nnoise_jy = 1\n",
                "fields.toml:2: field.image: no such.fits: no such file",
            ),
            ("[image]\nsize_px = [1, 2]\ntolerance = 1\n", "image.tolerance: unknown key"),
            ("[image]\nsize_px = [1, 2]\n", "image.centre_deg: missing"),
        ] {
            let error = refused(text);
            assert!(error.contains(said), "{text}: {error}");
        }
        let two = refused("[[field]]\nimage = 'a'\nnoise_jy = 1\n[[field]]\nimage = 'b'\nnoise = 'c'\n");
        for said in ["2: field[1].image: a:", "5: field[2].image: b:", "6: field[2].noise: c:"] {
            assert!(two.contains(said), "{two}");
        }
    }
}
