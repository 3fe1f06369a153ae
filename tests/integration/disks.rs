//! A real full disk, a disk that turns read-only, and one that fails a sync, all
//! under the program as a process.
//!
//! The full disk is a small file system of its own: ext4 in a file where loop
//! devices may be mounted, else tmpfs, else the shim of `power_cut` answers every
//! write as a full disk does; the test prints which it was. The other two always
//! take the shim: it answers with the error numbers of the system.

use crate::power_cut::under_the_shim;
use crate::under_load::{Ledger, Process, all_reported, look, name, program};
use serde_json::Value;
use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::Duration;

/// The disk under a database, and how it is filled.
struct Disk {
    room: tempfile::TempDir,
    kind: &'static str,
    mounted: bool,
}

impl Disk {
    fn folder(&self) -> PathBuf {
        let room = self.room.path().canonicalize().expect("a directory");
        room.join("disk")
    }

    fn weather(&self) -> PathBuf {
        self.room.path().join("weather")
    }

    fn ballast(&self) -> PathBuf {
        self.folder().join("ballast")
    }

    /// The first small file system that may be mounted here.
    fn small() -> Disk {
        let mut disk = Disk::under_the_shim();
        let (folder, image) = (disk.folder(), disk.room.path().join("image"));
        let file = fs::File::create(&image).expect("a file");
        file.set_len(16 << 20).expect("a length");
        let ext4 = does("mkfs.ext4", &["-q", "-F", text(&image)])
            && does("mount", &["-o", "loop", text(&image), text(&folder)]);
        let tmpfs = || {
            does(
                "mount",
                &["-t", "tmpfs", "-o", "size=8m", "none", text(&folder)],
            )
        };
        if ext4 {
            (disk.kind, disk.mounted) = ("ext4 of 16 MB", true);
        } else if tmpfs() {
            (disk.kind, disk.mounted) = ("tmpfs of 8 MB", true);
        }
        disk
    }

    /// None of its own: what the shim says.
    fn under_the_shim() -> Disk {
        let disk = Disk {
            room: tempfile::tempdir().expect("a directory"),
            kind: "the answers of a shim",
            mounted: false,
        };
        fs::create_dir(disk.folder()).expect("a directory");
        disk
    }

    fn database(&self) -> PathBuf {
        self.folder().join("test.sqlite")
    }

    fn start(&self) -> Process {
        let mut command = program(&self.database());
        if !self.mounted {
            under_the_shim(&mut command, &self.folder(), None);
            command.env("POWER_CUT_WEATHER", self.weather());
        }
        Process::start(command).expect("a service")
    }

    /// Takes all room but a little, which commits use up.
    fn fill(&self) {
        if !self.mounted {
            return self.becomes("f");
        }
        let mut ballast = fs::File::create(self.ballast()).expect("a file");
        let block = vec![7; 64 << 10];
        while std::io::Write::write_all(&mut ballast, &block).is_ok() {}
        let length = ballast.metadata().expect("a file").len();
        ballast
            .set_len(length.saturating_sub(128 << 10))
            .expect("a length");
    }

    fn free(&self) {
        if self.mounted {
            fs::remove_file(self.ballast()).expect("removed");
        } else {
            self.becomes("");
        }
    }

    fn becomes(&self, weather: &str) {
        fs::write(self.weather(), weather).expect("written");
    }
}

impl Drop for Disk {
    fn drop(&mut self) {
        if self.mounted {
            does("umount", &[text(&self.folder())]);
        }
    }
}

fn text(path: &Path) -> &str {
    path.to_str().expect("text")
}

fn does(program: &str, arguments: &[&str]) -> bool {
    let mut command = Command::new(program);
    let status = command
        .args(arguments)
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .status();
    status.is_ok_and(|status| status.success())
}

/// A service on a disk, and what it has acknowledged.
struct Trial {
    service: Process,
    ledger: Ledger,
    client: reqwest::Client,
}

impl Trial {
    async fn on(disk: &Disk) -> Trial {
        let trial = Trial {
            service: disk.start(),
            ledger: Ledger::default(),
            client: reqwest::Client::new(),
        };
        let address = &trial.service.address;
        trial.ledger.load(address, Duration::from_millis(100)).await;
        assert!(!trial.ledger.acknowledged().is_empty());
        trial
    }

    fn url(&self, path: &str) -> String {
        format!("http://{}{path}", self.service.address)
    }

    async fn status(&self, path: &str) -> u16 {
        let answer = self.client.get(self.url(path)).send().await;
        answer.expect("an answer").status().as_u16()
    }

    /// Posts until the disk refuses; the number of the batch that was, and the
    /// reason.
    async fn until_refused(&self) -> (usize, String) {
        for _ in 0..2000 {
            let number = self.ledger.take();
            let answer = self
                .ledger
                .post_one(&self.client, &self.url(""), number, true)
                .await;
            let answer = answer.expect("an answer");
            if answer.status() == 503 {
                assert_eq!(answer.headers()["retry-after"], "1");
                let problem: Value = answer.json().await.expect("JSON");
                return (number, problem["detail"].as_str().expect("text").to_owned());
            }
        }
        panic!("the disk takes everything");
    }

    /// What holds while the disk takes nothing: nothing is acknowledged, and what
    /// is there can be read.
    async fn refuses(&self, reason: &str) {
        let (refused, detail) = self.until_refused().await;
        assert!(detail.contains(reason), "{detail}");
        assert_eq!(self.status("/readyz").await, 503);
        assert_eq!(self.status("/livez").await, 200);
        let report = |batch: &str| format!("/v1/plants/mixer/batches/{batch}");
        assert_eq!(self.status(&report(&name(refused))).await, 404);
        let first = self
            .ledger
            .acknowledged()
            .into_iter()
            .next()
            .expect("a batch");
        assert_eq!(self.status(&report(&first)).await, 200);
        for _ in 0..5 {
            let (again, _) = self.until_refused().await;
            assert_eq!(self.status(&report(&name(again))).await, 404);
        }
    }

    /// The same process takes batches again.
    async fn recovers(&mut self) {
        let recovering = async {
            while self.status("/readyz").await != 200 {
                tokio::time::sleep(Duration::from_millis(10)).await;
            }
        };
        tokio::time::timeout(Duration::from_secs(10), recovering)
            .await
            .expect("in time");
        let before = self.ledger.acknowledged().len();
        self.ledger
            .load(&self.service.address, Duration::from_millis(50))
            .await;
        assert!(self.ledger.acknowledged().len() > before);
        all_reported(&self.service.address, &self.ledger).await;
        assert_eq!(self.service.ended(Duration::ZERO), None, "a restart");
    }

    /// Nothing was lost, nothing is half done.
    async fn ends_whole(self, database: &Path) {
        assert!(self.service.end(), "an orderly end");
        let found = look(database).await;
        assert_eq!(found.faults, Vec::<String>::new());
        assert_eq!(found.lost(&self.ledger), Vec::<String>::new());
        assert!(found.is_finished(), "{found:?}");
    }
}

async fn full(disk: Disk) {
    println!("the full disk is {}", disk.kind);
    let mut trial = Trial::on(&disk).await;
    for _ in 0..3 {
        disk.fill();
        trial.refuses("full").await;
        disk.free();
        trial.recovers().await;
    }
    trial.ends_whole(&disk.database()).await;
}

#[tokio::test]
async fn a_full_file_system_is_said_and_recovered_from() {
    full(Disk::small()).await;
}

#[tokio::test]
async fn a_disk_that_answers_as_a_full_one_does() {
    full(Disk::under_the_shim()).await;
}

#[tokio::test]
async fn a_disk_that_turns_read_only_is_said_and_recovered_from() {
    let disk = Disk::under_the_shim();
    let mut trial = Trial::on(&disk).await;
    for _ in 0..3 {
        disk.becomes("r");
        trial.refuses("").await;
        let (_, detail) = trial.until_refused().await;
        assert!(detail.contains("read-only"), "{detail}");
        disk.becomes("");
        trial.recovers().await;
    }
    trial.ends_whole(&disk.database()).await;
}

/// After a failed sync nobody knows what the disk holds: the service ends, and the
/// next start finds out.
#[tokio::test]
async fn a_failed_sync_ends_the_service() {
    let disk = Disk::under_the_shim();
    let mut trial = Trial::on(&disk).await;
    disk.becomes("s");
    let (client, number) = (&trial.client, trial.ledger.take());
    let answer = trial
        .ledger
        .post_one(client, &trial.url(""), number, true)
        .await;
    // The answer may be lost with the service; if there is one, it is no promise.
    assert!(answer.is_none_or(|answer| answer.status() == 503));
    let ended = trial.service.ended(Duration::from_secs(10));
    assert_eq!(
        ended,
        Some(Some(3)),
        "not ended, or as if nothing was wrong"
    );
    disk.becomes("");
    trial.service = disk.start();
    trial.recovers().await;
    trial.ends_whole(&disk.database()).await;
}
