//! Whether the frame files on disk are the ones that were seen.

use std::{
    fs::File,
    io,
    path::{Component, Path},
};

use sha2::{Digest, Sha256};

use super::Finding;
use crate::run::{RunError, RunReader, rows::FrameRow};

const SUBJECT: &str = "frame files";

enum State {
    Same,
    Missing,
    Changed,
    Unhashed,
}

pub(super) fn check(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    let frames = reader.frames()?;
    if frames.is_empty() {
        return Ok(vec![Finding::note(SUBJECT, "the run has no frames")]);
    }
    let folder = reader.frames_dir()?;
    if !folder.is_dir() {
        let sentence = format!(
            "the folder {} is not there: stamps do not need it, rings and overlays do; keep it beside the run file",
            folder.display()
        );
        return Ok(vec![Finding::note(SUBJECT, sentence)]);
    }
    let mut findings = Vec::new();
    let (mut same, mut unhashed, mut missing) = (0, 0, Vec::new());
    for frame in &frames {
        match state(&folder, frame) {
            State::Same => same += 1,
            State::Unhashed => unhashed += 1,
            State::Missing => missing.push(frame.file.as_str()),
            State::Changed => {
                let sentence = format!(
                    "{} is not the file that was recorded: its stamp holds for the old picture, trust no rings measured on this one",
                    frame.file
                );
                findings.push(Finding::fault(SUBJECT, sentence));
            }
        }
    }
    if let Some(first) = missing.first() {
        let sentence = format!(
            "{} of {} frame files are not in {}, the first is {first}: their stamps hold, their pictures cannot be looked at again",
            missing.len(),
            frames.len(),
            folder.display()
        );
        findings.push(Finding::note(SUBJECT, sentence));
    }
    if unhashed > 0 {
        let sentence = format!("{unhashed} frame files could not be read when they came: they cannot be compared");
        findings.push(Finding::note(SUBJECT, sentence));
    }
    if same > 0 {
        findings.push(Finding::fine(SUBJECT, format!("{same} of {} are byte for byte as recorded", frames.len())));
    }
    Ok(findings)
}

fn state(folder: &Path, frame: &FrameRow) -> State {
    let name = Path::new(&frame.file);
    // The name comes from the run file: it must not lead out of the folder.
    if !name.components().all(|part| matches!(part, Component::Normal(_))) {
        return State::Missing;
    }
    if frame.sha256.is_empty() {
        return State::Unhashed;
    }
    match hash(&folder.join(name)) {
        Ok(found) if found == frame.sha256 => State::Same,
        Ok(_) => State::Changed,
        Err(_) => State::Missing,
    }
}

fn hash(path: &Path) -> io::Result<String> {
    let mut hasher = Sha256::new();
    let mut file = File::open(path)?;
    let mut piece = vec![0; 1 << 16];
    loop {
        match io::Read::read(&mut file, &mut piece)? {
            0 => break,
            count => hasher.update(&piece[..count]),
        }
    }
    Ok(crate::text::hex(&hasher.finalize()))
}
