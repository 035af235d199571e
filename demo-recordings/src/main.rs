//! `demo-recordings [FOLDER]`: makes the demo recording sets, by default beside this crate's `Cargo.toml`.

use std::path::PathBuf;

use anyhow::bail;

fn main() -> anyhow::Result<()> {
    let mut arguments = std::env::args_os().skip(1);
    let folder = arguments
        .next()
        .map_or_else(|| PathBuf::from(env!("CARGO_MANIFEST_DIR")), PathBuf::from);
    if let Some(extra) = arguments.next() {
        bail!("one folder at most, but there is also {extra:?}");
    }
    if folder.to_string_lossy().starts_with('-') {
        bail!("{folder:?} is not a folder; usage: demo-recordings [FOLDER]");
    }
    let made = demo_recordings::make()?;
    demo_recordings::writer::write(&folder, &made.files)?;
    for file in &made.files {
        println!("{:>9} bytes  {}", file.bytes.len(), file.path);
    }
    println!(
        "\nRows made bad on purpose:\n\n{}",
        demo_recordings::faults::markdown(&made.faults)
    );
    Ok(())
}
