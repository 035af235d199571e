//! A made recording set, and the command run on it.

use std::fmt::Write as _;
use std::path::{Path, PathBuf};
use std::process::{Command, Output};

use tempfile::TempDir;

/// What one run of the command said.
pub struct Said {
    pub code: Option<i32>,
    pub out: String,
    pub err: String,
}

impl Said {
    fn of(output: Output) -> Self {
        let said = Self {
            code: output.status.code(),
            out: String::from_utf8_lossy(&output.stdout).into_owned(),
            err: String::from_utf8_lossy(&output.stderr).into_owned(),
        };
        for text in [&said.out, &said.err] {
            assert!(!text.contains("panicked"), "{text}");
            assert!(!text.contains("internal fault"), "{text}");
            assert!(!text.contains('\u{1b}'), "colour off a terminal: {text}");
        }
        said
    }

    /// Demands an exit code and every one of some words on standard error.
    pub fn fails(&self, code: i32, words: &[&str]) {
        assert_eq!(self.code, Some(code), "{}\n{}", self.out, self.err);
        assert!(self.err.starts_with("error: "), "{}", self.err);
        // What is wrong, and on a line of its own the way out.
        assert!(self.err.lines().count() >= 2, "no remedy: {}", self.err);
        for word in words {
            assert!(self.err.contains(word), "no {word:?} in: {}", self.err);
        }
    }

    pub fn succeeds(&self) {
        assert_eq!(self.code, Some(0), "{}\n{}", self.out, self.err);
    }
}

/// Runs `halfrise` with `arguments`.
pub fn halfrise(arguments: &[&str]) -> Said {
    Said::of(command(arguments).output().expect("the command starts"))
}

pub fn command(arguments: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_halfrise"));
    command.args(arguments);
    command
}

/// A recording set in a folder of its own, with room for results beside it.
pub struct Made {
    pub home: TempDir,
}

impl Made {
    /// Three healthy cells of ten current steps.
    pub fn healthy() -> Self {
        Self::with_cells(&["a", "b", "c"])
    }

    pub fn with_cells(names: &[&str]) -> Self {
        let made = Self {
            home: tempfile::tempdir().expect("a temporary folder"),
        };
        std::fs::create_dir(made.set()).expect("set folder");
        let quoted: Vec<String> = names
            .iter()
            .map(|n| format!("\"{}\"", n.replace('"', "\"\"")))
            .collect();
        made.write("spikes.csv", spikes(&quoted));
        made.write("protocol.csv", protocol(&quoted));
        made
    }

    pub fn set(&self) -> PathBuf {
        self.home.path().join("set")
    }

    pub fn out(&self) -> PathBuf {
        self.home.path().join("out")
    }

    pub fn write(&self, name: &str, content: impl AsRef<[u8]>) {
        std::fs::write(self.set().join(name), content).expect("a table is written");
    }

    pub fn read(&self, name: &str) -> String {
        std::fs::read_to_string(self.set().join(name)).expect("a table is read")
    }

    /// `halfrise fit` into `out`, without figures.
    pub fn fit(&self, more: &[&str]) -> Said {
        let mut arguments = vec![
            "fit",
            text(&self.set()),
            "--out",
            text(&self.out()),
            "--no-figures",
        ]
        .into_iter()
        .map(str::to_owned)
        .collect::<Vec<_>>();
        arguments.extend(more.iter().map(|s| (*s).to_owned()));
        halfrise(&arguments.iter().map(String::as_str).collect::<Vec<_>>())
    }
}

pub fn text(path: &Path) -> &str {
    path.to_str().expect("a path in UTF-8")
}

const LEVELS: usize = 16;

/// Rate of the made cells, Hz: a hyperbola above 100 pA.
fn rate(level: usize) -> f64 {
    let above = 50.0 * level as f64 - 100.0;
    if above > 0.0 {
        80.0 * above / (150.0 + above)
    } else {
        0.0
    }
}

fn protocol(cells: &[String]) -> String {
    let mut table = String::from("cell,sweep,onset,offset,current\n");
    for cell in cells {
        for level in 0..LEVELS {
            writeln!(table, "{cell},{level},0.1,1.1,{}", 50 * level).expect("text");
        }
    }
    table
}

/// Spikes with intervals that alternate a little, so that no cell is a clock.
fn spikes(cells: &[String]) -> String {
    let mut table = String::from("cell,sweep,time\n");
    for (shift, cell) in cells.iter().enumerate() {
        for level in 0..LEVELS {
            let rate = rate(level);
            if rate == 0.0 {
                continue;
            }
            let mut time = 0.1 + 0.3 / rate;
            let mut turn = shift;
            while time < 1.1 {
                writeln!(table, "{cell},{level},{time:.6}").expect("text");
                time += (1.0 + 0.15 * [1.0, -0.6, 0.4, -0.8][turn % 4]) / rate;
                turn += 1;
            }
        }
    }
    table
}

/// Bytes of every Parquet table of a result folder, by name.
pub fn tables(folder: &Path) -> Vec<(String, Vec<u8>)> {
    let mut found: Vec<_> = std::fs::read_dir(folder)
        .expect("a result folder")
        .map(|e| e.expect("an entry").path())
        .filter(|p| p.extension().is_some_and(|e| e == "parquet"))
        .map(|p| {
            let name = p
                .file_name()
                .map(|n| n.to_string_lossy().into_owned())
                .unwrap_or_default();
            (name, std::fs::read(&p).expect("a table"))
        })
        .collect();
    found.sort();
    found
}

/// One column of a result table as text, in the order of its rows.
pub fn column(file: &Path, name: &str) -> Vec<String> {
    use parquet::file::reader::{FileReader, SerializedFileReader};
    let file = std::fs::File::open(file).expect("a table");
    let reader = SerializedFileReader::new(file).expect("a Parquet table");
    reader
        .get_row_iter(None)
        .expect("rows")
        .map(|row| {
            let row = row.expect("a row");
            let found = row.get_column_iter().find(|(n, _)| *n == name);
            found.unwrap_or_else(|| panic!("no column {name}")).1.to_string()
        })
        .collect()
}
