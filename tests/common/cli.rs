//! Running the real binary in a folder of its own.
#![allow(dead_code)]

use std::path::{Path, PathBuf};
use std::process::{Command, Output};
use std::sync::atomic::{AtomicUsize, Ordering};

/// A folder that goes when it is dropped.
pub struct Folder(pub PathBuf);

impl Folder {
    pub fn new() -> Self {
        static COUNT: AtomicUsize = AtomicUsize::new(0);
        let n = COUNT.fetch_add(1, Ordering::Relaxed);
        let path = std::env::temp_dir().join(format!("regauge-test-{}-{n}", std::process::id()));
        std::fs::create_dir_all(&path).unwrap();
        Folder(path)
    }

    pub fn path(&self, name: &str) -> PathBuf {
        self.0.join(name)
    }

    /// Names in the folder, sorted.
    pub fn list(&self) -> Vec<String> {
        let mut names: Vec<String> = std::fs::read_dir(&self.0)
            .unwrap()
            .map(|e| e.unwrap().file_name().to_string_lossy().into_owned())
            .collect();
        names.sort();
        names
    }

    pub fn regauge(&self, arguments: &[&str]) -> Run {
        let output = Command::new(env!("CARGO_BIN_EXE_regauge"))
            .args(arguments)
            .current_dir(&self.0)
            .output()
            .unwrap();
        Run { arguments: arguments.join(" "), output }
    }
}

impl Drop for Folder {
    fn drop(&mut self) {
        let _ = std::fs::remove_dir_all(&self.0);
    }
}

/// What a run left.
pub struct Run {
    arguments: String,
    pub output: Output,
}

impl Run {
    pub fn stdout(&self) -> String {
        String::from_utf8_lossy(&self.output.stdout).into_owned()
    }

    pub fn stderr(&self) -> String {
        String::from_utf8_lossy(&self.output.stderr).into_owned()
    }

    /// Demands an exit code, and that nothing panicked.
    pub fn ends(self, code: i32) -> Self {
        let (out, err) = (self.stdout(), self.stderr());
        assert_eq!(self.output.status.code(), Some(code), "regauge {}\n{out}\n{err}", self.arguments);
        assert!(!err.contains("panicked"), "{err}");
        self
    }

    /// Demands words on stderr.
    pub fn says(self, words: &str) -> Self {
        let err = self.stderr();
        assert!(err.contains(words), "regauge {}: no \"{words}\" in\n{err}", self.arguments);
        self
    }
}

/// An NPY file of f32 or u16.
pub fn write_npy(path: &Path, rows: usize, columns: usize, descr: &str, bytes: &[u8]) {
    let mut head = format!("{{'descr': '{descr}', 'fortran_order': False, 'shape': ({rows}, {columns}), }}");
    while (10 + head.len() + 1) % 64 != 0 {
        head.push(' ');
    }
    head.push('\n');
    let mut out = b"\x93NUMPY\x01\x00".to_vec();
    out.extend((head.len() as u16).to_le_bytes());
    out.extend(head.bytes());
    out.extend(bytes);
    std::fs::write(path, out).unwrap();
}

/// A ramp with a bump, as f32.
pub fn write_f32(path: &Path, rows: usize, columns: usize) {
    let value = |i: usize| {
        (i % columns) as f32 * 0.25 + (i / columns) as f32 * 3.0 + ((i * 7919) % 101) as f32 * 0.01
    };
    let bytes: Vec<u8> = (0..rows * columns).flat_map(|i| value(i).to_le_bytes()).collect();
    write_npy(path, rows, columns, "<f4", &bytes);
}

/// Uneven counts, as u16.
pub fn write_u16(path: &Path, rows: usize, columns: usize) {
    let bytes: Vec<u8> =
        (0..rows * columns).flat_map(|i| (((i * 7919) % 4001) as u16).to_le_bytes()).collect();
    write_npy(path, rows, columns, "<u2", &bytes);
}
