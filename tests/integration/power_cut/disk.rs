//! What a disk holds after a power cut, worked out from the shim's journal.
//!
//! A disk keeps what was synced. Of everything later it keeps what it pleases:
//! any subset of the writes, each whole or torn at its sectors, truncations that
//! came or did not, and names of files that were made or removed since the folder
//! was last synced. Holes are zeros.

use rand::Rng;
use rand_chacha::ChaCha8Rng;
use std::collections::BTreeMap;
use std::path::Path;

/// Files of a folder by name.
pub type Files = BTreeMap<String, Vec<u8>>;

/// A folder's files, without the index of the log, which no cut leaves.
pub fn read(folder: &Path) -> Files {
    let entries = std::fs::read_dir(folder).expect("a folder");
    let paths = entries.map(|entry| entry.expect("an entry").path());
    paths
        .map(|path| {
            let name = path.file_name().expect("a name").to_string_lossy();
            (name.into_owned(), std::fs::read(&path).expect("a file"))
        })
        .filter(|(name, _)| !name.ends_with("-shm"))
        .collect()
}

/// Has a folder hold these files and no other.
pub fn write(folder: &Path, files: &Files) {
    let _ = std::fs::remove_dir_all(folder);
    std::fs::create_dir_all(folder).expect("a folder");
    for (name, bytes) in files {
        std::fs::write(folder.join(name), bytes).expect("written");
    }
}

#[derive(Clone)]
enum Change {
    Bytes(usize, Vec<u8>),
    Length(usize),
}

enum Naming {
    Made(String, usize),
    Removed(String),
}

#[derive(Default)]
struct File {
    synced: Vec<u8>,
    since: Vec<Change>,
}

/// A disk under a running program.
#[derive(Default)]
pub struct Disk {
    files: Vec<File>,
    names: BTreeMap<String, usize>,
    synced_names: BTreeMap<String, usize>,
    namings: Vec<Naming>,
    /// Our files by the shim's numbers.
    numbers: BTreeMap<u64, usize>,
}

/// How much of what was not synced a cut leaves.
#[derive(Clone, Copy, Debug)]
struct Mercy {
    /// Probability that a change is kept at all.
    kept: f64,
    /// Probability that a kept write is torn.
    torn: f64,
    /// Bytes that are written whole or not at all.
    sector: usize,
}

impl Mercy {
    fn random(random: &mut ChaCha8Rng) -> Mercy {
        let sector = [512, 4096][random.random_range(0..2)];
        let (kept, torn) =
            [(0.0, 0.0), (0.5, 0.5), (0.5, 0.0), (0.9, 0.3), (1.0, 0.1)][random.random_range(0..5)];
        Mercy { kept, torn, sector }
    }
}

impl Disk {
    /// A disk that holds these files for good.
    pub fn new(files: &Files) -> Disk {
        let mut disk = Disk::default();
        for (name, bytes) in files {
            disk.names.insert(name.clone(), disk.files.len());
            disk.files.push(File {
                synced: bytes.clone(),
                since: Vec::new(),
            });
        }
        disk.synced_names = disk.names.clone();
        disk
    }

    /// Does what a journal says; a record that breaks off at its end was not
    /// done.
    pub fn replay(&mut self, mut journal: &[u8]) {
        const HEAD: usize = 40;
        while journal.len() >= HEAD {
            let field = |n: usize| {
                let bytes = journal[8 * n..8 * n + 8].try_into().expect("eight bytes");
                u64::from_ne_bytes(bytes)
            };
            let length = usize::try_from(field(3)).expect("a length");
            let Some(bytes) = journal.get(HEAD..HEAD + length) else {
                return;
            };
            self.record(field(0), field(1), field(2), bytes);
            journal = &journal[HEAD + length..];
        }
    }

    fn record(&mut self, kind: u64, file: u64, place: u64, bytes: &[u8]) {
        let place = usize::try_from(place).expect("a place");
        let text = || String::from_utf8(bytes.to_vec()).expect("text");
        match kind {
            1 => self.opened(text(), file, place == 1),
            2 => self.change(file, Change::Bytes(place, bytes.to_vec())),
            3 => self.change(file, Change::Length(place)),
            4 => {
                let file = &mut self.files[self.numbers[&file]];
                for change in std::mem::take(&mut file.since) {
                    apply(&mut file.synced, &change);
                }
            }
            5 => {
                self.synced_names = self.names.clone();
                self.namings.clear();
            }
            6 => {
                self.names.remove(&text());
                self.namings.push(Naming::Removed(text()));
            }
            7 => panic!(
                "the program did something to its files that the shim cannot follow: {}",
                text()
            ),
            other => panic!("record {other}"),
        }
    }

    fn opened(&mut self, name: String, number: u64, fresh: bool) {
        let file = if fresh {
            self.files.push(File::default());
            let file = self.files.len() - 1;
            self.names.insert(name.clone(), file);
            self.namings.push(Naming::Made(name, file));
            file
        } else {
            self.names[&name]
        };
        self.numbers.insert(number, file);
    }

    fn change(&mut self, number: u64, change: Change) {
        self.files[self.numbers[&number]].since.push(change);
    }

    /// The files as the program sees them.
    pub fn seen(&self) -> Files {
        let names = self.names.iter();
        names
            .map(|(name, &file)| {
                let file = &self.files[file];
                let mut bytes = file.synced.clone();
                file.since
                    .iter()
                    .for_each(|change| apply(&mut bytes, change));
                (name.clone(), bytes)
            })
            .collect()
    }

    /// The files that a power cut now would leave.
    pub fn cut(&self, random: &mut ChaCha8Rng) -> Files {
        let mercy = Mercy::random(random);
        let mut names = self.synced_names.clone();
        for naming in &self.namings {
            if !random.random_bool(mercy.kept) {
                continue;
            }
            match naming {
                Naming::Made(name, file) => names.insert(name.clone(), *file),
                Naming::Removed(name) => names.remove(name),
            };
        }
        let names = names.into_iter();
        names
            .map(|(name, file)| (name, self.files[file].cut(mercy, random)))
            .collect()
    }
}

impl File {
    fn cut(&self, mercy: Mercy, random: &mut ChaCha8Rng) -> Vec<u8> {
        let mut bytes = self.synced.clone();
        for change in &self.since {
            if !random.random_bool(mercy.kept) {
                continue;
            }
            match change {
                Change::Bytes(at, written) if random.random_bool(mercy.torn) => {
                    tear(&mut bytes, *at, written, mercy.sector, random);
                }
                whole => apply(&mut bytes, whole),
            }
        }
        bytes
    }
}

/// Writes some of the sectors that a write touches.
fn tear(into: &mut Vec<u8>, at: usize, written: &[u8], sector: usize, random: &mut ChaCha8Rng) {
    let mut from = 0;
    while from < written.len() {
        let to = ((at + from) / sector + 1) * sector - at;
        let part = &written[from..to.min(written.len())];
        if random.random_bool(0.5) {
            apply(into, &Change::Bytes(at + from, part.to_vec()));
        }
        from += part.len();
    }
}

fn apply(bytes: &mut Vec<u8>, change: &Change) {
    match change {
        Change::Length(length) => bytes.resize(*length, 0),
        Change::Bytes(at, written) => {
            let end = at + written.len();
            if bytes.len() < end {
                bytes.resize(end, 0);
            }
            bytes[*at..end].copy_from_slice(written);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::SeedableRng;

    fn record(kind: u64, file: u64, place: u64, bytes: &[u8]) -> Vec<u8> {
        let length = u64::try_from(bytes.len()).expect("a length");
        let numbers = [kind, file, place, length, 0];
        let head = numbers.iter().flat_map(|number| number.to_ne_bytes());
        head.chain(bytes.iter().copied()).collect()
    }

    /// A file of two blocks is synced; a third and a second file are not.
    fn half_synced() -> Disk {
        let mut disk = Disk::new(&Files::new());
        let journal = [
            record(1, 1, 1, b"a"),
            record(5, 0, 0, b""),
            record(2, 1, 0, &[1; 1024]),
            record(4, 1, 0, b""),
            record(2, 1, 1024, &[2; 1024]),
            record(1, 2, 1, b"b"),
            record(2, 2, 0, &[3; 512]),
            record(2, 1, 0, &[9; 8])[..44].to_vec(),
        ];
        disk.replay(&journal.concat());
        disk
    }

    #[test]
    fn what_was_synced_stays_and_the_rest_may_or_may_not() {
        let disk = half_synced();
        let whole = [[1; 1024], [2; 1024]].concat();
        assert_eq!(disk.seen()["a"], whole, "a record that broke off counts");
        let mut outcomes = std::collections::BTreeSet::new();
        for seed in 0..500 {
            let mut files = disk.cut(&mut ChaCha8Rng::seed_from_u64(seed));
            let a = files.remove("a").expect("it was synced with its folder");
            assert!(a[..1024] == [1; 1024], "synced bytes are gone");
            let rest: Vec<u8> = a[1024..].iter().step_by(512).copied().collect();
            outcomes.insert((rest, files.contains_key("b")));
        }
        for rest in [vec![], vec![2], vec![0, 2], vec![2, 2]] {
            assert!(outcomes.iter().any(|(seen, _)| *seen == rest), "{rest:?}");
        }
        assert!(outcomes.iter().any(|(_, b)| *b) && outcomes.iter().any(|(_, b)| !*b));
    }
}
