//! Shares pieces between worker threads and commits them in order.
//!
//! Each worker takes the next piece, computes it, and hands the result to the piece's part. Whoever finds the part's next
//! piece in order ready, and nobody committing, commits it: so a part is written in order without a thread of its own,
//! and N threads are exactly N busy threads. At most `in_flight` pieces are between taken and committed; the oldest one
//! is always being worked on, so the bound cannot block. Pieces of a few parts are interleaved when there are many
//! threads, because one file can be written by one thread at a time only. None of this can change a byte of the output.

use crate::error::{Error, Result};
use std::collections::{BTreeMap, HashMap};
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::{Condvar, Mutex, MutexGuard};

/// One worker in this many keeps a part of its own busy.
const THREADS_PER_PART: usize = 8;

/// What the schedule runs.
pub trait Work: Sync {
    /// What computing a piece yields.
    type Made: Send;
    /// A part that is being written.
    type Open: Send;

    /// Number of pieces of part `part`.
    fn pieces(&self, part: usize) -> usize;
    /// Computes a piece; runs on many threads.
    fn make(&self, part: usize, piece: usize) -> Result<Self::Made>;
    /// Opens a part, before its first piece is committed.
    fn open(&self, part: usize) -> Result<Self::Open>;
    /// Adds a piece to an open part; called in order of the pieces.
    fn commit(&self, part: usize, open: &mut Self::Open, made: Self::Made) -> Result<()>;
    /// Finishes a part after its last piece.
    fn close(&self, part: usize, open: Self::Open) -> Result<()>;
    /// Whether to stop taking new pieces.
    fn stopping(&self) -> bool;
}

struct PartState<W: Work> {
    ready: BTreeMap<usize, W::Made>,
    next: usize,
    committing: bool,
    open: Option<W::Open>,
}

struct State<W: Work> {
    taken: usize,
    in_flight: usize,
    parts: HashMap<usize, PartState<W>>,
    failed: Option<Error>,
}

/// Runs the parts numbered in `parts` on `threads` threads with at most `in_flight` pieces in memory.
///
/// # Errors
/// The first failure; pieces in hand are dropped, finished parts stay.
pub fn run<W: Work>(work: &W, parts: &[usize], threads: usize, in_flight: usize) -> Result<()> {
    let order = order(parts, |part| work.pieces(part), threads);
    let shared = Shared {
        work,
        order: &order,
        limit: in_flight.max(1),
        state: Mutex::new(State { taken: 0, in_flight: 0, parts: HashMap::new(), failed: None }),
        changed: Condvar::new(),
    };
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(threads.max(1))
        .thread_name(|i| format!("worker-{i}"))
        .build()
        .map_err(|e| Error::failed(format!("The worker threads cannot be started: {e}.")))?;
    pool.broadcast(|_| shared.worker());
    match shared.lock().failed.take() {
        Some(error) => Err(error),
        None => Ok(()),
    }
}

/// Pieces in the order in which they are taken: groups of parts, their pieces in turn.
fn order(parts: &[usize], pieces: impl Fn(usize) -> usize, threads: usize) -> Vec<(usize, usize)> {
    let together = 1 + threads.saturating_sub(1) / THREADS_PER_PART;
    let mut order = Vec::new();
    for group in parts.chunks(together) {
        let longest = group.iter().map(|part| pieces(*part)).max().unwrap_or(0);
        for piece in 0..longest {
            order.extend(group.iter().filter(|part| piece < pieces(**part)).map(|part| (*part, piece)));
        }
    }
    order
}

struct Shared<'a, W: Work> {
    work: &'a W,
    order: &'a [(usize, usize)],
    limit: usize,
    state: Mutex<State<W>>,
    changed: Condvar,
}

impl<W: Work> Shared<'_, W> {
    fn lock(&self) -> MutexGuard<'_, State<W>> {
        // panics are caught before they can poison; should one slip through, the state is still a consistent one
        self.state.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
    }

    fn worker(&self) {
        while let Some((part, piece)) = self.take() {
            let made = calmly(|| self.work.make(part, piece));
            self.hand_in(part, piece, made);
        }
    }

    fn take(&self) -> Option<(usize, usize)> {
        let mut state = self.lock();
        loop {
            if state.failed.is_some() || self.work.stopping() || state.taken == self.order.len() {
                return None;
            }
            if state.in_flight < self.limit {
                break;
            }
            state = self.changed.wait(state).unwrap_or_else(|poisoned| poisoned.into_inner());
        }
        state.in_flight += 1;
        state.taken += 1;
        Some(self.order[state.taken - 1])
    }

    fn hand_in(&self, part: usize, piece: usize, made: Result<W::Made>) {
        let mut state = self.lock();
        match made {
            Err(error) => self.fail(&mut state, error),
            Ok(made) => {
                let entry = state.parts.entry(part).or_insert_with(|| PartState {
                    ready: BTreeMap::new(),
                    next: 0,
                    committing: false,
                    open: None,
                });
                entry.ready.insert(piece, made);
                self.commit_ready(state, part);
            }
        }
    }

    /// Commits pieces of `part` as long as the next one in order is ready and nobody else is at it.
    fn commit_ready<'s>(&'s self, mut state: MutexGuard<'s, State<W>>, part: usize) {
        loop {
            if state.failed.is_some() {
                return;
            }
            let Some(entry) = state.parts.get_mut(&part) else { return };
            if entry.committing {
                return;
            }
            let next = entry.next;
            let Some(made) = entry.ready.remove(&next) else { return };
            entry.committing = true;
            let open = entry.open.take();
            drop(state);

            let last = next + 1 == self.work.pieces(part);
            let done = calmly(|| {
                let mut open = match open {
                    Some(open) => open,
                    None => self.work.open(part)?,
                };
                self.work.commit(part, &mut open, made)?;
                if last { self.work.close(part, open).map(|()| None) } else { Ok(Some(open)) }
            });

            state = self.lock();
            state.in_flight -= 1;
            match done {
                Err(error) => self.fail(&mut state, error),
                Ok(open) => {
                    if last {
                        state.parts.remove(&part);
                    } else if let Some(entry) = state.parts.get_mut(&part) {
                        entry.open = open;
                        entry.next += 1;
                        entry.committing = false;
                    }
                    self.changed.notify_all();
                }
            }
        }
    }

    fn fail(&self, state: &mut State<W>, error: Error) {
        state.failed.get_or_insert(error);
        self.changed.notify_all();
    }
}

/// A panic inside becomes an error: one worker's defect must not take the process, and its message, away.
fn calmly<T>(work: impl FnOnce() -> Result<T>) -> Result<T> {
    catch_unwind(AssertUnwindSafe(work)).unwrap_or_else(|panic| {
        let text = panic
            .downcast_ref::<String>()
            .map(String::as_str)
            .or_else(|| panic.downcast_ref::<&str>().copied())
            .unwrap_or("no message");
        Err(Error::failed(format!("This is a defect of tenparsec, please report it: {text}")))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    struct Log {
        sizes: Vec<usize>,
        done: Mutex<Vec<(usize, Vec<usize>)>>,
        flying: Mutex<(usize, usize)>,
        fail_at: Option<(usize, usize)>,
    }

    impl Work for Log {
        type Made = usize;
        type Open = Vec<usize>;

        fn pieces(&self, part: usize) -> usize {
            self.sizes[part]
        }

        fn make(&self, part: usize, piece: usize) -> Result<usize> {
            let mut flying = self.flying.lock().unwrap();
            flying.0 += 1;
            flying.1 = flying.1.max(flying.0);
            drop(flying);
            std::thread::sleep(std::time::Duration::from_micros(((part * 7 + piece * 13) % 5) as u64 * 100));
            if self.fail_at == Some((part, piece)) {
                panic!("injected");
            }
            Ok(piece)
        }

        fn open(&self, _part: usize) -> Result<Vec<usize>> {
            Ok(Vec::new())
        }

        fn commit(&self, _part: usize, open: &mut Vec<usize>, made: usize) -> Result<()> {
            self.flying.lock().unwrap().0 -= 1;
            open.push(made);
            Ok(())
        }

        fn close(&self, part: usize, open: Vec<usize>) -> Result<()> {
            self.done.lock().unwrap().push((part, open));
            Ok(())
        }

        fn stopping(&self) -> bool {
            false
        }
    }

    fn log(sizes: &[usize], fail_at: Option<(usize, usize)>) -> Log {
        Log { sizes: sizes.to_vec(), done: Mutex::default(), flying: Mutex::default(), fail_at }
    }

    #[test]
    fn every_piece_is_committed_once_in_order_within_the_bound() {
        for threads in [1, 2, 3, 8, 20] {
            for in_flight in [1, 2, 5] {
                let work = log(&[3, 1, 7, 2, 12, 1, 1, 30], None);
                run(&work, &[0, 1, 2, 3, 4, 5, 6, 7], threads, in_flight).unwrap();
                let mut done = work.done.into_inner().unwrap();
                done.sort();
                assert_eq!(done.len(), 8);
                for (part, pieces) in done {
                    assert_eq!(pieces, (0..work.sizes[part]).collect::<Vec<_>>());
                }
                assert!(work.flying.into_inner().unwrap().1 <= in_flight);
            }
        }
    }

    #[test]
    fn a_panic_becomes_an_error_and_nothing_hangs() {
        for threads in [1, 2, 8] {
            let work = log(&[5, 5, 5], Some((1, 2)));
            let error = run(&work, &[0, 1, 2], threads, 3).unwrap_err();
            assert!(error.message.contains("injected"), "{error}");
        }
    }
}
