//! The passes beside a plain copy of the output's bytes, in memory, f32, all cores.
#![allow(clippy::unwrap_used, missing_docs)]

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use regauge::grid::Grid;
use regauge::map::{Map, Motion};
use regauge::raster::{Header, Raster, SampleType, Samples};
use regauge::resample::{Engine, Outside, Plan, Rules};
use std::hint::black_box;

fn passes(c: &mut Criterion) {
    let n = 2048;
    let samples = Samples::F32((0..n * n).map(|i| ((i * 7919) % 10_007) as f32).collect());
    let source = Raster::new(Header::new(Grid::new(n, n), 1, SampleType::F32), samples).unwrap();
    let rescale = |factor: f64| {
        let (m, step) = ((n as f64 * factor) as usize, 1.0 / factor);
        (m, Map::axes((step, 0.5 * (step - 1.0)), (step, 0.5 * (step - 1.0))))
    };
    let turn = Motion { turn: 12.5, ..Motion::about_centre(n, n) }.map().unwrap().invert().unwrap();
    let cases = [
        ("rescale x1.5", rescale(1.5)),
        ("rescale x0.667", rescale(2.0 / 3.0)),
        ("shift", (n, Map::shift(-0.37, 1.25))),
        ("turn", (n, turn)),
    ];
    for (name, (m, back)) in cases {
        let mut group = c.benchmark_group(name);
        group.sample_size(10);
        group.throughput(Throughput::Bytes((m * m * 4) as u64));
        let bytes = vec![1.0f32; m * m];
        group.bench_function("plain copy", |b| b.iter(|| black_box(&bytes).clone()));
        for kernel in ["linear", "keys", "bspline:3", "lanczos:4"] {
            let rules = Rules {
                kernel: kernel.parse().unwrap(),
                outside: Outside::Extend,
                memory: 8 << 30,
                ..Rules::default()
            };
            let engine = Engine {
                source: &source,
                target: (m, m),
                plan: Plan::new((n, n), (m, m), &back, &rules).unwrap(),
                rules: &rules,
                codes: Default::default(),
                sample_type: SampleType::F32,
                fill: None,
                extras: Default::default(),
            };
            group.bench_function(kernel, |b| {
                b.iter(|| {
                    engine
                        .run(256, None, &mut |block| {
                            black_box(block.samples.len());
                            Ok(())
                        })
                        .unwrap();
                });
            });
        }
        group.finish();
    }
}

criterion_group!(benches, passes);
criterion_main!(benches);
