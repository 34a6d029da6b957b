//! Jobs taken by several threads, their results handed over in order.

use std::collections::BTreeMap;
use std::sync::{Condvar, Mutex, MutexGuard};

/// Results that may wait for an earlier one.
const MOST_WAITING: usize = 1024;
/// Their size at most, bytes; one more may come on top of it per thread.
const MOST_BYTES: usize = 16 << 20;

struct State<T> {
    /// Next job that nobody has taken.
    next: usize,
    /// Job whose result is handed over next.
    wanted: usize,
    waiting: BTreeMap<usize, T>,
    bytes: usize,
    stop: bool,
}

/// Runs `work(job, threads)` for every job from `first` to `end`, on `jobs` threads,
/// and hands the results to `deliver` in order, on the caller's thread. Where fewer
/// jobs are left than threads, each is told how many it may use inside. `size` is
/// what a result occupies while it waits, bytes. `work` must not panic: its result would be waited for.
///
/// # Errors
/// The first of `deliver`, which ends the run once the jobs in work are done.
pub fn in_order<T: Send, E>(
    first: usize,
    end: usize,
    jobs: usize,
    work: impl Fn(usize, usize) -> T + Sync,
    size: impl Fn(&T) -> usize + Sync,
    mut deliver: impl FnMut(usize, T) -> Result<(), E>,
) -> Result<(), E> {
    let state = Mutex::new(State {
        next: first,
        wanted: first,
        waiting: BTreeMap::new(),
        bytes: 0,
        stop: false,
    });
    let (room, ready) = (Condvar::new(), Condvar::new());
    let jobs = jobs.max(1);
    std::thread::scope(|scope| {
        for _ in 0..jobs.min(end.saturating_sub(first)) {
            scope.spawn(|| {
                loop {
                    let mut s = lock(&state);
                    // Whoever works on the wanted job is never held up.
                    while !s.stop
                        && s.next > s.wanted
                        && s.next < end
                        && (s.waiting.len() >= MOST_WAITING || s.bytes >= MOST_BYTES)
                    {
                        s = room
                            .wait(s)
                            .unwrap_or_else(std::sync::PoisonError::into_inner);
                    }
                    if s.stop || s.next >= end {
                        break;
                    }
                    let job = s.next;
                    s.next += 1;
                    drop(s);
                    let result = work(job, jobs.div_ceil((end - job).min(jobs)));
                    let mut s = lock(&state);
                    s.bytes += size(&result);
                    s.waiting.insert(job, result);
                    if job == s.wanted {
                        ready.notify_one();
                    }
                }
            });
        }
        for job in first..end {
            let mut s = lock(&state);
            let result = loop {
                if let Some(result) = s.waiting.remove(&job) {
                    break result;
                }
                s = ready
                    .wait(s)
                    .unwrap_or_else(std::sync::PoisonError::into_inner);
            };
            s.bytes = s.bytes.saturating_sub(size(&result));
            s.wanted = job + 1;
            drop(s);
            room.notify_all();
            if let Err(error) = deliver(job, result) {
                lock(&state).stop = true;
                room.notify_all();
                return Err(error);
            }
        }
        Ok(())
    })
}

/// A panic elsewhere is passed on by the scope; the state itself stays whole.
fn lock<T>(state: &Mutex<State<T>>) -> MutexGuard<'_, State<T>> {
    state
        .lock()
        .unwrap_or_else(std::sync::PoisonError::into_inner)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn results_come_in_order() {
        for jobs in [1, 2, 7] {
            let mut got = Vec::new();
            let done: Result<(), ()> = in_order(
                3,
                60,
                jobs,
                |job, _| {
                    // later jobs are quicker
                    std::thread::sleep(std::time::Duration::from_micros(60 - job as u64));
                    job * job
                },
                |_| 1 << 22,
                |job, result| {
                    got.push((job, result));
                    Ok(())
                },
            );
            assert_eq!(done, Ok(()));
            assert_eq!(got, (3..60).map(|j| (j, j * j)).collect::<Vec<_>>());
        }
    }

    #[test]
    fn an_error_ends_the_run() {
        let done = in_order(
            0,
            1_000_000,
            4,
            |job, _| job,
            |_| 1,
            |job, _| if job == 10 { Err(job) } else { Ok(()) },
        );
        assert_eq!(done, Err(10));
    }

    #[test]
    fn the_last_jobs_get_the_idle_threads() {
        let shares = Mutex::new(Vec::new());
        let done: Result<(), ()> = in_order(
            0,
            5,
            4,
            |job, threads| shares.lock().unwrap().push((job, threads)),
            |()| 0,
            |_, ()| Ok(()),
        );
        assert_eq!(done, Ok(()));
        let mut shares = shares.into_inner().unwrap();
        shares.sort_unstable();
        assert_eq!(shares, [(0, 1), (1, 1), (2, 2), (3, 2), (4, 4)]);
    }
}
