//! Cost of the predictive law: its program beside a general solver on the same programs in the same run, and a tick.

use criterion::{BatchSize, Criterion, Throughput, criterion_group, criterion_main};
use std::hint::black_box;
use std::time::Instant;
use trackhold_core::law::predictive::STEPS;
use trackhold_core::law::predictive::qp::{Limits, Solver};
use trackhold_tests::horizons::{General, PERIOD_S, Recorded, record, ticks};

const LIMITS: Limits = Limits { iterations: 30, tolerance: 1e-8 };
const PROGRAMS: usize = 1000;

/// The middle and the greatest of some times, µs.
fn middle_and_most(mut times: Vec<f64>) -> (f64, f64) {
    times.sort_by(f64::total_cmp);
    (times[times.len() / 2], times[times.len() - 1])
}

/// How often a single time is measured; the least counts, so that what interrupts it does not.
const ROUNDS: usize = 5;

fn least_us(mut work: impl FnMut()) -> f64 {
    let once = |work: &mut dyn FnMut()| {
        let begin = Instant::now();
        work();
        begin.elapsed().as_secs_f64() * 1e6
    };
    (0..ROUNDS).map(|_| once(&mut work)).fold(f64::INFINITY, f64::min)
}

/// Every program once, each by both solvers: the spread over programs, which a mean hides.
fn spread(recorded: &[Recorded]) {
    let mut solver = Solver::<STEPS>::default();
    let mut ours = Vec::new();
    for one in recorded {
        ours.push(least_us(|| {
            black_box(solver.solve(&one.program, one.constant, LIMITS)).expect("it is solved");
        }));
    }
    let (middle, most) = middle_and_most(ours);
    println!(
        "{PROGRAMS} programs of {STEPS} steps, each the least of {ROUNDS}: median {middle:.1} µs, worst {most:.1} µs"
    );
    // No tolerance is ever met: every iteration allowed is made.
    let endless = Limits { tolerance: -1.0, ..LIMITS };
    let mut capped = Vec::new();
    for one in &recorded[..100] {
        capped.push(least_us(|| {
            let _ = black_box(solver.solve(&one.program, one.constant, endless));
        }));
    }
    let (middle, most) = middle_and_most(capped);
    println!("the same with all {} iterations: median {middle:.1} µs, worst {most:.1} µs", LIMITS.iterations);
    let general: Vec<f64> = recorded[..200]
        .iter()
        .map(|one| {
            let form = General::new(one);
            least_us(|| {
                black_box(form.solve(General::usual())).expect("it is solved");
            })
        })
        .collect();
    let (middle, most) = middle_and_most(general);
    println!("200 of them by Clarabel: median {middle:.1} µs, worst {most:.1} µs");
    let (mut began, mut went_on) = (Vec::new(), Vec::new());
    ticks(40, &mut |first, seconds| (if first { &mut began } else { &mut went_on }).push(seconds * 1e6));
    let (middle, most) = middle_and_most(went_on);
    let (begin, _) = middle_and_most(began);
    println!(
        "ticks of the same loops at {} Hz, once each: median {middle:.1} µs, worst {most:.1} µs (with what interrupts); the \
         first after a start {begin:.1} µs",
        1.0 / PERIOD_S
    );
}

fn programs(criterion: &mut Criterion) {
    let recorded = record(PROGRAMS);
    spread(&recorded);
    let mut group = criterion.benchmark_group("program of 20 steps, mean over 100");
    group.throughput(Throughput::Elements(100)).sample_size(20);
    group.bench_function("own", |bencher| {
        let mut solver = Solver::<STEPS>::default();
        bencher.iter(|| {
            for one in &recorded[..100] {
                black_box(solver.solve(&one.program, one.constant, LIMITS)).expect("it is solved");
            }
        });
    });
    let general: Vec<General> = recorded[..100].iter().map(General::new).collect();
    group.bench_function("Clarabel", |bencher| {
        bencher.iter_batched(
            General::usual,
            |settings| {
                for one in &general {
                    black_box(one.solve(settings.clone())).expect("it is solved");
                }
            },
            BatchSize::SmallInput,
        );
    });
    group.finish();
}

criterion_group!(benches, programs);
criterion_main!(benches);
