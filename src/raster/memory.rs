//! Rasters in memory.

use super::{Header, Samples, Sink, Source, Storage, Window, check_window};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::raster::{Format, SampleType};
use crate::with_samples;
use std::ops::Range;
use std::sync::{Arc, Mutex};

/// A raster in memory: the header and all samples, band by band.
#[derive(Clone, Debug)]
pub struct Raster {
    header: Header,
    samples: Samples,
}

impl Header {
    /// A raster without anything said about it but size, place and type.
    pub fn new(grid: Grid, bands: usize, sample_type: SampleType) -> Self {
        let storage = Storage { format: Format::Memory, ..Storage::default() };
        Header { grid, bands, sample_type, missing: None, band_names: Vec::new(), storage }
    }
}

impl Raster {
    /// Joins a header with its samples.
    ///
    /// # Errors
    /// When their number or type differs from what the header says.
    pub fn new(header: Header, samples: Samples) -> Result<Self> {
        let wanted = header.grid.pixels().saturating_mul(header.bands);
        if samples.len() != wanted || samples.sample_type() != header.sample_type {
            return Err(Error::usage(
                format!(
                    "{} samples of {} for {} bands of {} x {} pixels of {}",
                    samples.len(),
                    samples.sample_type().name(),
                    header.bands,
                    header.grid.rows,
                    header.grid.columns,
                    header.sample_type.name()
                ),
                "",
            ));
        }
        Ok(Raster { header, samples })
    }

    /// All samples.
    pub fn samples(&self) -> &Samples {
        &self.samples
    }

    /// All samples, to be kept.
    pub fn into_samples(self) -> Samples {
        self.samples
    }

    /// The header, to be changed.
    pub fn header_mut(&mut self) -> &mut Header {
        &mut self.header
    }
}

impl Source for Raster {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let (rows, columns) = (self.header.grid.rows, self.header.grid.columns);
        Ok(with_samples!(&self.samples, v => {
            let mut out = Vec::with_capacity(bands.len() * window.area());
            for band in bands {
                for r in window.rows.clone() {
                    let line = &v[(band * rows + r) * columns..][..columns];
                    out.extend_from_slice(&line[window.columns.clone()]);
                }
            }
            out.into()
        }))
    }
}

/// Collects windows into a raster, which is taken from the handle after [`Sink::finish`].
pub struct MemorySink {
    raster: Raster,
    done: Arc<Mutex<Option<Raster>>>,
}

/// Where a [`MemorySink`] leaves its raster.
pub struct Collected(Arc<Mutex<Option<Raster>>>);

impl Collected {
    /// The raster, once the sink was finished.
    pub fn take(&self) -> Option<Raster> {
        self.0.lock().ok()?.take()
    }
}

impl MemorySink {
    /// A sink for a raster of that header.
    pub fn new(header: Header) -> (Self, Collected) {
        let samples = Samples::zeros(header.sample_type, header.grid.pixels() * header.bands);
        let done = Arc::new(Mutex::new(None));
        (MemorySink { raster: Raster { header, samples }, done: done.clone() }, Collected(done))
    }
}

impl Sink for MemorySink {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        let header = &self.raster.header;
        let whole = (header.grid.rows, header.grid.columns);
        let (at, size) =
            ((window.rows.start, window.columns.start), (window.rows.len(), window.columns.len()));
        self.raster.samples.place(samples, header.bands, whole, at, size)
    }

    fn finish(self: Box<Self>) -> Result<()> {
        if let Ok(mut slot) = self.done.lock() {
            *slot = Some(self.raster);
        }
        Ok(())
    }
}
