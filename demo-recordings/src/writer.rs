//! The files of the sets: gzip, and writing to disk.

use std::path::Path;

use anyhow::Context;

/// A file of a set.
#[derive(Clone, Debug, PartialEq)]
pub struct SetFile {
    /// Path below this crate's folder, with `/`.
    pub path: String,
    /// Its bytes.
    pub bytes: Vec<u8>,
}

impl SetFile {
    /// A text file.
    pub fn plain(path: String, text: String) -> Self {
        Self {
            path,
            bytes: text.into_bytes(),
        }
    }

    /// A gzipped text file.
    pub fn gzipped(path: String, text: &str) -> Self {
        Self {
            path,
            bytes: gzip(text.as_bytes()),
        }
    }

    /// The text, unpacked where the file is gzipped.
    #[cfg(test)]
    pub(crate) fn text(&self) -> std::io::Result<String> {
        use std::io::Read;
        let mut text = String::new();
        if self.path.ends_with(".gz") {
            flate2::read::GzDecoder::new(&self.bytes[..]).read_to_string(&mut text)?;
        } else {
            (&self.bytes[..]).read_to_string(&mut text)?;
        }
        Ok(text)
    }
}

/// One gzip member (RFC 1952) without file name and time, so that it depends on the content alone.
fn gzip(content: &[u8]) -> Vec<u8> {
    const DEFLATE: u8 = 8;
    const NO_FLAGS: u8 = 0;
    const NO_TIME: [u8; 4] = [0; 4];
    const SLOWEST: u8 = 2;
    const SYSTEM_UNKNOWN: u8 = 255;
    let mut packed = vec![0x1f, 0x8b, DEFLATE, NO_FLAGS];
    packed.extend(NO_TIME);
    packed.extend([SLOWEST, SYSTEM_UNKNOWN]);
    packed.extend(miniz_oxide::deflate::compress_to_vec(content, 9));
    packed.extend(crc32fast::hash(content).to_le_bytes());
    // The format keeps the length modulo 2^32.
    packed.extend((content.len() as u32).to_le_bytes());
    packed
}

/// Writes the files below `folder`, over what is there.
///
/// # Errors
/// Where a folder or file cannot be written, with its path.
pub fn write(folder: &Path, files: &[SetFile]) -> anyhow::Result<()> {
    for file in files {
        let path = folder.join(&file.path);
        if let Some(parent) = path.parent() {
            std::fs::create_dir_all(parent)
                .with_context(|| format!("cannot make the folder {}", parent.display()))?;
        }
        std::fs::write(&path, &file.bytes).with_context(|| format!("cannot write {}", path.display()))?;
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn an_independent_reader_unpacks_the_gzip_and_its_checksum_holds() {
        let text: String = (0..20_000)
            .map(|i| format!("A-{:02},{},{}\n", i % 7, i % 90, i * 37 % 7919))
            .collect();
        let file = SetFile::gzipped("x.csv.gz".to_owned(), &text);
        assert!(file.bytes.len() < text.len() / 2);
        assert_eq!(file.bytes[4..8], [0; 4], "no time");
        assert_eq!(file.text().unwrap(), text);
        let mut damaged = file;
        let crc = damaged.bytes.len() - 8;
        damaged.bytes[crc] ^= 1;
        assert!(damaged.text().is_err());
    }
}
