//! Power cuts: the disk keeps what was synced and as much of the rest as it
//! pleases. No acknowledged batch may be lost.
//!
//! A shim journals what the service does to its files (`shim.c`), the process
//! dies at a chosen write or sync, and what the disk would hold then is worked out
//! from the journal (`disk`). The same trial is run with a service whose commits do
//! not wait for the disk: there it has to find losses, or it would prove nothing.

mod child;
mod disk;

use crate::under_load::{Found, Ledger, Process, all_reported, cycles, look, program};
use counterpoise::store::Synchronous;
use disk::{Disk, Files};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::LazyLock;
use std::time::Duration;

/// Cuts of one database; then a new one is begun, so that its making is cut too.
const CUTS_OF_A_DATABASE: usize = 10;

/// How long a service is loaded where no cut comes.
const LOADED: Duration = Duration::from_secs(20);

/// The shim, compiled once by the compiler that SQLite was compiled with.
pub static SHIM: LazyLock<PathBuf> = LazyLock::new(|| {
    let source = concat!(
        env!("CARGO_MANIFEST_DIR"),
        "/tests/integration/power_cut/shim.c"
    );
    let name = format!("power-cut-{}.so", std::process::id());
    let shim = Path::new(env!("CARGO_TARGET_TMPDIR")).join(name);
    let status = Command::new(std::env::var("CC").unwrap_or("cc".to_owned()))
        .args(["-shared", "-fPIC", "-O1", "-o"])
        .arg(&shim)
        .args([source, "-lpthread"])
        .status()
        .expect("a C compiler");
    assert!(status.success(), "the shim does not compile");
    shim
});

/// Puts a program under the shim.
pub fn under_the_shim(command: &mut Command, folder: &Path, journal: Option<&Path>) {
    command.env("LD_PRELOAD", &*SHIM);
    command.env("POWER_CUT_FOLDER", folder);
    if let Some(journal) = journal {
        command.env("POWER_CUT_JOURNAL", journal);
    }
}

/// What a trial came to.
#[derive(Debug, Default)]
struct Outcome {
    cuts: usize,
    cuts_at_the_start: usize,
    acknowledged: usize,
    readings: usize,
    lost: Vec<String>,
    faults: Vec<String>,
    databases: usize,
}

struct Trial {
    random: ChaCha8Rng,
    synchronous: Synchronous,
    room: tempfile::TempDir,
    outcome: Outcome,
}

impl Trial {
    fn new(seed: u64, synchronous: Synchronous) -> Trial {
        Trial {
            random: ChaCha8Rng::seed_from_u64(seed),
            synchronous,
            room: tempfile::tempdir().expect("a directory"),
            outcome: Outcome::default(),
        }
    }

    fn place(&self, name: &str) -> PathBuf {
        let room = self.room.path().canonicalize().expect("a directory");
        room.join(name)
    }

    /// Cuts one database so many times, and then looks whether everything that
    /// was acknowledged is there and finished. Ends early where something is not.
    async fn database(&mut self, cuts: usize) {
        let ledger = Ledger::default();
        let mut files = Files::new();
        for _ in 0..cuts {
            files = self.cycle(&ledger, &files).await;
            let found = self.look(&files).await;
            if self.judge(&found, &ledger) {
                return;
            }
        }
        let folder = self.place("data");
        disk::write(&folder, &files);
        let database = folder.join("test.sqlite");
        let service = Process::start(program(&database)).expect("a service after the cuts");
        all_reported(&service.address, &ledger).await;
        assert!(service.end(), "an orderly end");
        let found = look(&database).await;
        self.judge(&found, &ledger);
        assert!(found.is_finished(), "{found:?}");
        self.outcome.acknowledged += ledger.acknowledged().len();
        self.outcome.readings += ledger.readings();
        self.outcome.databases += 1;
    }

    /// Notes what is wrong; whether anything is.
    fn judge(&mut self, found: &Found, ledger: &Ledger) -> bool {
        let lost = found.lost(ledger);
        let bad = !lost.is_empty() || !found.faults.is_empty();
        self.outcome.lost.extend(lost);
        self.outcome.faults.extend(found.faults.iter().cloned());
        bad
    }

    /// Runs a service on these files under load until the power is cut; what is
    /// then on the disk.
    async fn cycle(&mut self, ledger: &Ledger, files: &Files) -> Files {
        let (folder, journal) = (self.place("data"), self.place("journal"));
        disk::write(&folder, files);
        let _ = std::fs::remove_file(&journal);
        let _ = std::fs::remove_file(self.place("armed"));
        let mut command = self.service(&folder.join("test.sqlite"));
        under_the_shim(&mut command, &folder, Some(&journal));
        let after = self.moment(&mut command);
        match Process::start(command) {
            None => self.outcome.cuts_at_the_start += 1,
            Some(mut service) => {
                std::fs::write(self.place("armed"), "").expect("written");
                ledger.load(&service.address, LOADED).await;
                let ended = service.ended(Duration::from_secs(10)).is_some();
                assert!(ended, "no cut after {after} calls in {LOADED:?}");
            }
        }
        self.outcome.cuts += 1;
        let mut disk = Disk::new(files);
        disk.replay(&std::fs::read(&journal).expect("a journal"));
        let real = disk::read(&folder);
        let seen = disk.seen();
        assert!(
            seen == real,
            "the shim has missed something: {:?}",
            differences(&seen, &real)
        );
        disk.cut(&mut self.random)
    }

    /// The program itself; where commits are not to wait, a service of the test's
    /// own, because no setting of the program reaches that.
    fn service(&mut self, database: &Path) -> Command {
        if self.synchronous == Synchronous::Full && self.random.random_bool(0.5) {
            program(database)
        } else {
            child::command(database, self.synchronous)
        }
    }

    /// Chooses when the power is cut: in the start with its checkpoint; under load;
    /// or so late in it that SQLite writes its log back meanwhile.
    fn moment(&mut self, command: &mut Command) -> usize {
        let after = match self.random.random_range(0..10) {
            0..3 => self.random.random_range(0..60),
            kind => {
                command.env("POWER_CUT_ARMED", self.place("armed"));
                let most = if kind < 8 { 400 } else { 4000 };
                self.random.random_range(0..most)
            }
        };
        command.env("POWER_CUT_AFTER", after.to_string());
        after
    }

    /// What a database holds that these files are.
    async fn look(&self, files: &Files) -> Found {
        let folder = self.place("copy");
        disk::write(&folder, files);
        look(&folder.join("test.sqlite")).await
    }
}

/// What two folders differ in, without their bytes.
fn differences(one: &Files, other: &Files) -> Vec<String> {
    let names = one.keys().chain(other.keys());
    names
        .filter(|name| one.get(*name) != other.get(*name))
        .map(|name| {
            let length = |files: &Files| files.get(name).map(Vec::len);
            format!("{name}: {:?} and {:?} bytes", length(one), length(other))
        })
        .collect()
}

async fn trial(seed: u64, synchronous: Synchronous, cuts: usize) -> Outcome {
    let mut trial = Trial::new(seed, synchronous);
    while trial.outcome.cuts < cuts && trial.outcome.lost.is_empty() {
        let left = cuts - trial.outcome.cuts;
        trial.database(left.min(CUTS_OF_A_DATABASE)).await;
    }
    trial.outcome
}

#[tokio::test]
async fn no_acknowledged_batch_is_lost() {
    let outcome = trial(1, Synchronous::Full, cycles(6)).await;
    println!("{outcome:?}");
    assert!(outcome.lost.is_empty(), "{outcome:?}");
    assert!(outcome.faults.is_empty(), "{outcome:?}");
    assert!(
        outcome.acknowledged > 5 * outcome.cuts,
        "hardly any load: {outcome:?}"
    );
}

#[tokio::test]
async fn commits_that_do_not_wait_for_the_disk_are_seen_to_be_lost() {
    let outcome = trial(2, Synchronous::Normal, 20).await;
    println!("{outcome:?}");
    assert!(
        !outcome.lost.is_empty(),
        "the trial finds nothing: {outcome:?}"
    );
}
