//! The program killed (SIGKILL) again and again under load, on one database: no
//! acknowledged batch is lost and none is there twice.
//!
//! A kill says nothing about the disk: what was written is in the kernel. That is
//! what `power_cut` is for.

use crate::power_cut::under_the_shim;
use crate::under_load::{Ledger, Process, all_reported, cycles, look, program, signal};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// Longer than any load before a kill.
const LOADED: Duration = Duration::from_secs(5);

/// When a service is killed.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Moment {
    /// While it starts.
    Start,
    /// While it is posted to.
    Load,
    /// While it writes its log back into the database, at the start or at an end.
    Checkpoint,
}

const MOMENTS: [Moment; 4] = [
    Moment::Load,
    Moment::Start,
    Moment::Checkpoint,
    Moment::Load,
];

struct Trial {
    random: ChaCha8Rng,
    ledger: Ledger,
    folder: PathBuf,
    database: PathBuf,
    /// Kills that struck, by moment.
    kills: BTreeMap<Moment, usize>,
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
        }
    }

    fn milliseconds(&mut self, from: u64, to: u64) -> Duration {
        Duration::from_millis(self.random.random_range(from..to))
    }

    async fn cycle(&mut self, moment: Moment) {
        let killed = match moment {
            Moment::Start => {
                let starting = Process::begin(&mut program(&self.database));
                starting.kill_after(self.milliseconds(0, 100))
            }
            Moment::Load => self.under_load().await,
            Moment::Checkpoint => self.in_a_checkpoint().await,
        };
        *self.kills.entry(moment).or_default() += usize::from(killed);
    }

    async fn under_load(&mut self) -> bool {
        let service = Process::start(program(&self.database)).expect("a service");
        let after = self.milliseconds(20, 400);
        let kill = async {
            tokio::time::sleep(after).await;
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
    let wanted = cycles(6);
    for n in 0.. {
        trial.cycle(MOMENTS[n % MOMENTS.len()]).await;
        if trial.kills.values().sum::<usize>() >= wanted {
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
    assert!(service.end(), "an orderly end");
    let found = look(&trial.database).await;
    let acknowledged = trial.ledger.acknowledged().len();
    println!(
        "{:?}: {acknowledged} acknowledged, {} accepted",
        trial.kills,
        found.accepted.len()
    );
    assert_eq!(found.faults, Vec::<String>::new());
    assert_eq!(found.lost(&trial.ledger), Vec::<String>::new());
    assert!(found.is_finished(), "{found:?}");
    assert!(
        acknowledged > 20 * wanted,
        "hardly any load: {acknowledged}"
    );
    for moment in MOMENTS {
        assert!(trial.kills[&moment] > 0, "{moment:?}");
    }
}
