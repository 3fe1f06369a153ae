//! The program killed (SIGKILL) again and again under load, on one database: no
//! acknowledged batch is lost and none is there twice.
//!
//! A kill says nothing about the disk: what was written is in the kernel. That is
//! what `power_cut` is for.

use crate::harness::number;
use crate::power_cut::under_the_shim;
use crate::readings::until;
use crate::under_load::{Ledger, Process, all_reported, cycles, look, program, signal};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

/// Longer than any load before a kill.
const LOADED: Duration = Duration::from_secs(60);

/// When a service is killed.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Moment {
    /// While it starts.
    Start,
    /// While it is posted to.
    Load,
    /// While days that are over are made into chunks, which begins a second after the
    /// start.
    Tidy,
    /// While it writes its log back into the database, at the start or at an end.
    Checkpoint,
}

const MOMENTS: [Moment; 5] = [
    Moment::Load,
    Moment::Start,
    Moment::Checkpoint,
    Moment::Tidy,
    Moment::Load,
];

struct Trial {
    random: ChaCha8Rng,
    ledger: Ledger,
    folder: PathBuf,
    database: PathBuf,
    /// Kills that struck, by moment.
    kills: BTreeMap<Moment, usize>,
    /// How long the last whole start took: a kill within that strikes a start.
    starting: Duration,
}

impl Trial {
    fn new(seed: u64, folder: &Path) -> Trial {
        let folder = folder.canonicalize().expect("a directory");
        Trial {
            random: ChaCha8Rng::seed_from_u64(seed),
            ledger: Ledger::default(),
            database: folder.join("test.sqlite"),
            folder,
            kills: BTreeMap::new(),
            starting: Duration::ZERO,
        }
    }

    fn milliseconds(&mut self, from: u64, to: u64) -> Duration {
        Duration::from_millis(self.random.random_range(from..to))
    }

    async fn cycle(&mut self, moment: Moment) {
        let killed = match moment {
            Moment::Start => {
                let starting = Process::begin(&mut program(&self.database));
                starting.kill_after(self.starting.mul_f64(self.random.random_range(0.0..1.0)))
            }
            Moment::Load => self.under_load().await,
            Moment::Tidy => self.while_it_tidies().await,
            Moment::Checkpoint => self.in_a_checkpoint().await,
        };
        *self.kills.entry(moment).or_default() += usize::from(killed);
    }

    /// Killed a moment after so many more batches have been acknowledged.
    async fn under_load(&mut self) -> bool {
        let began = Instant::now();
        let service = Process::start(program(&self.database)).expect("a service");
        self.starting = began.elapsed();
        let wanted = self.ledger.acknowledged().len() + self.random.random_range(1..120);
        let then = Duration::from_micros(self.random.random_range(0..5000));
        let kill = async {
            while self.ledger.acknowledged().len() < wanted {
                tokio::time::sleep(Duration::from_millis(1)).await;
            }
            tokio::time::sleep(then).await;
            signal(service.id(), "KILL");
        };
        tokio::join!(self.ledger.load(&service.address, LOADED), kill);
        true
    }

    async fn while_it_tidies(&mut self) -> bool {
        let service = Process::start(program(&self.database)).expect("a service");
        let then = Duration::from_secs(1) + self.milliseconds(0, 150);
        let kill = async {
            tokio::time::sleep(then).await;
            signal(service.id(), "KILL");
        };
        tokio::join!(self.ledger.load(&service.address, LOADED), kill);
        true
    }

    /// The shim kills it at one of its writes into the database file itself,
    /// which only a checkpoint makes: the one of the start, or of an end in order.
    async fn in_a_checkpoint(&mut self) -> bool {
        let mut command = program(&self.database);
        under_the_shim(&mut command, &self.folder, None);
        let name = self.database.file_name().expect("a name");
        command.env("POWER_CUT_FILE", name);
        let most = [3, 30][self.random.random_range(0..2)];
        let after = self.random.random_range(0..most);
        command.env("POWER_CUT_AFTER", after.to_string());
        let Some(service) = Process::start(command) else {
            return true;
        };
        let lasting = self.milliseconds(100, 300);
        self.ledger.load(&service.address, lasting).await;
        !service.end()
    }
}

#[tokio::test]
async fn killed_services_lose_nothing_and_double_nothing() {
    let directory = tempfile::tempdir().expect("a directory");
    let mut trial = Trial::new(3, directory.path());
    let wanted = cycles(5);
    for n in 0.. {
        trial.cycle(MOMENTS[n % MOMENTS.len()]).await;
        // A start may be over before the kill comes: then there is another.
        let each = MOMENTS
            .iter()
            .all(|moment| trial.kills.get(moment) > Some(&0));
        if each && trial.kills.values().sum::<usize>() >= wanted {
            break;
        }
        assert!(
            n < 3 * wanted + 10,
            "kills do not strike: {:?}",
            trial.kills
        );
    }
    let service = Process::start(program(&trial.database)).expect("a service");
    all_reported(&service.address, &trial.ledger).await;
    // A kill may have come before the first day was done; what it left is tidied now.
    until("chunks", async || {
        let chunks = number(&trial.database, "SELECT count(*) FROM chunks").await;
        (chunks > 0).then_some(())
    })
    .await;
    assert!(service.end(), "an orderly end");
    let found = look(&trial.database).await;
    let acknowledged = trial.ledger.acknowledged().len();
    println!(
        "{:?}: {acknowledged} batches acknowledged, {} accepted; {} readings acknowledged",
        trial.kills,
        found.accepted.len(),
        trial.ledger.readings(),
    );
    assert_eq!(found.faults, Vec::<String>::new());
    assert_eq!(found.lost(&trial.ledger), Vec::<String>::new());
    assert!(found.is_finished(), "{found:?}");
    assert!(found.chunks > 0, "nothing was ever tidied");
    assert!(acknowledged > 5 * wanted, "hardly any load: {acknowledged}");
    assert!(trial.ledger.readings() > 5 * wanted);
    for moment in MOMENTS {
        assert!(trial.kills[&moment] > 0, "{moment:?}");
    }
}
