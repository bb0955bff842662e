//! A disk that counts calls, fails where it is told to, and can lose power.
//!
//! Files are real, below one root; beside them it keeps what would be on the platter: the content of each file at its
//! last sync and the names in each folder at the folder's last sync. Losing power puts the folder back to that.

use std::collections::{BTreeMap, HashMap};
use std::fs;
use std::io;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, MutexGuard};

use tarehouse_store::disk::{Disk, DiskFile, Entry, Held, OpenMode, RealDisk};

/// What happens at the chosen call.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Fault {
    /// The call fails.
    Error,
    /// The call fails for lack of space.
    NoSpace,
    /// Half of a write arrives, then it fails for lack of space; other calls fail.
    Short,
    /// The call and all later ones fail, as if the process had ended.
    Kill,
}

/// How much of what was not synced a power cut leaves.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Leave {
    Nothing,
    /// Half of the bytes appended to each file.
    Half,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Node {
    Folder,
    File(u64),
}

#[derive(Debug, Default)]
struct World {
    calls: u64,
    fault: Option<(u64, Fault)>,
    dead: bool,
    ignore_sync: bool,
    next: u64,
    names: BTreeMap<PathBuf, Node>,
    durable_names: BTreeMap<PathBuf, Node>,
    durable_content: HashMap<u64, Vec<u8>>,
}

#[derive(Debug, Clone)]
pub(crate) struct SimDisk {
    root: PathBuf,
    world: Arc<Mutex<World>>,
}

#[derive(Debug)]
struct SimFile {
    file: Box<dyn DiskFile>,
    number: u64,
    world: Arc<Mutex<World>>,
}

impl World {
    /// Counts a call and says whether it fails.
    fn gate(&mut self) -> io::Result<Option<Fault>> {
        if self.dead {
            return Err(io::Error::other("the process is gone"));
        }
        self.calls += 1;
        match self.fault {
            Some((at, fault)) if at == self.calls => match fault {
                Fault::Error => Err(io::Error::other("injected")),
                Fault::NoSpace => Err(io::ErrorKind::StorageFull.into()),
                Fault::Short => Ok(Some(fault)),
                Fault::Kill => {
                    self.dead = true;
                    Err(io::Error::other("the process is gone"))
                }
            },
            _ => Ok(None),
        }
    }

    fn plain_gate(&mut self) -> io::Result<()> {
        match self.gate()? {
            Some(_) => Err(io::ErrorKind::StorageFull.into()),
            None => Ok(()),
        }
    }

    fn node(&mut self, path: &Path) -> Node {
        if path.is_dir() {
            return *self.names.entry(path.to_owned()).or_insert(Node::Folder);
        }
        self.next += 1;
        let fresh = Node::File(self.next);
        *self.names.entry(path.to_owned()).or_insert(fresh)
    }
}

impl SimDisk {
    pub(crate) fn new(root: &Path) -> Self {
        Self {
            root: root.to_owned(),
            world: Arc::default(),
        }
    }

    fn world(&self) -> MutexGuard<'_, World> {
        self.world.lock().unwrap()
    }

    pub(crate) fn calls(&self) -> u64 {
        self.world().calls
    }

    /// Fails the call with this number, counted from the beginning.
    pub(crate) fn fail_at(&self, call: u64, fault: Fault) {
        self.world().fault = Some((call, fault));
    }

    /// Lets syncs do nothing: the negative control.
    pub(crate) fn ignore_sync(&self) {
        self.world().ignore_sync = true;
    }

    /// Works again, without faults.
    pub(crate) fn revive(&self) {
        let mut world = self.world();
        world.fault = None;
        world.dead = false;
    }

    /// Puts the folder back to what was synced.
    pub(crate) fn power_cut(&self, leave: Leave) {
        let mut world = self.world();
        let mut kept = BTreeMap::new();
        for (path, node) in &world.durable_names {
            let mut parents = path.ancestors().skip(1).take_while(|p| *p != self.root);
            if !path.starts_with(&self.root)
                || !parents.all(|p| world.durable_names.get(p) == Some(&Node::Folder))
            {
                continue;
            }
            let content = match node {
                Node::Folder => Vec::new(),
                Node::File(number) => {
                    let mut content = world
                        .durable_content
                        .get(number)
                        .cloned()
                        .unwrap_or_default();
                    let now = world.names.iter().find(|(_, n)| *n == node).map(|(p, _)| p);
                    if leave == Leave::Half
                        && let Some(now) = now.and_then(|path| fs::read(path).ok())
                        && now.len() > content.len()
                        && now.starts_with(&content)
                    {
                        let end = content.len() + (now.len() - content.len()).div_ceil(2);
                        content = now[..end].to_vec();
                    }
                    content
                }
            };
            kept.insert(path.clone(), (*node, content));
        }
        if self.root.exists() {
            fs::remove_dir_all(&self.root).unwrap();
        }
        fs::create_dir(&self.root).unwrap();
        world.names.clear();
        for (path, (node, content)) in kept {
            match node {
                Node::Folder => fs::create_dir(&path).unwrap(),
                Node::File(number) => {
                    fs::write(&path, &content).unwrap();
                    world.durable_content.insert(number, content);
                }
            }
            world.names.insert(path, node);
        }
        world.durable_names = world.names.clone();
        world.dead = false;
        world.fault = None;
    }
}

impl Disk for SimDisk {
    fn open(&self, path: &Path, mode: OpenMode) -> io::Result<Box<dyn DiskFile>> {
        let mut world = self.world();
        world.plain_gate()?;
        let file = RealDisk.open(path, mode)?;
        let Node::File(number) = world.node(path) else {
            return Err(io::Error::other("a folder"));
        };
        Ok(Box::new(SimFile {
            file,
            number,
            world: Arc::clone(&self.world),
        }))
    }

    fn rename(&self, from: &Path, to: &Path) -> io::Result<()> {
        let mut world = self.world();
        world.plain_gate()?;
        RealDisk.rename(from, to)?;
        let node = world.names.remove(from).unwrap();
        world.names.insert(to.to_owned(), node);
        Ok(())
    }

    fn remove_file(&self, path: &Path) -> io::Result<()> {
        let mut world = self.world();
        world.plain_gate()?;
        RealDisk.remove_file(path)?;
        world.names.remove(path);
        Ok(())
    }

    fn create_dir(&self, path: &Path) -> io::Result<()> {
        let mut world = self.world();
        world.plain_gate()?;
        RealDisk.create_dir(path)?;
        world.node(path);
        Ok(())
    }

    fn remove_dir_all(&self, path: &Path) -> io::Result<()> {
        let mut world = self.world();
        world.plain_gate()?;
        RealDisk.remove_dir_all(path)?;
        world.names.retain(|name, _| !name.starts_with(path));
        Ok(())
    }

    fn sync_dir(&self, path: &Path) -> io::Result<()> {
        let mut world = self.world();
        world.plain_gate()?;
        if world.ignore_sync || !path.starts_with(&self.root) {
            return Ok(());
        }
        world
            .durable_names
            .retain(|name, _| name.parent() != Some(path));
        for entry in RealDisk.list(path)? {
            let name = path.join(entry.name);
            let node = world.node(&name);
            world.durable_names.insert(name, node);
        }
        Ok(())
    }

    fn list(&self, path: &Path) -> io::Result<Vec<Entry>> {
        self.world().plain_gate()?;
        RealDisk.list(path)
    }

    fn size(&self, path: &Path) -> io::Result<Option<u64>> {
        self.world().plain_gate()?;
        RealDisk.size(path)
    }

    fn lock(&self, path: &Path) -> io::Result<Box<dyn Held>> {
        self.world().plain_gate()?;
        RealDisk.lock(path)
    }
}

impl DiskFile for SimFile {
    fn read_at(&mut self, offset: u64, into: &mut [u8]) -> io::Result<usize> {
        self.world.lock().unwrap().plain_gate()?;
        self.file.read_at(offset, into)
    }

    fn write_at(&mut self, offset: u64, bytes: &[u8]) -> io::Result<usize> {
        let fault = self.world.lock().unwrap().gate()?;
        if fault.is_some() {
            self.file.write_at(offset, &bytes[..bytes.len() / 2])?;
            return Err(io::ErrorKind::StorageFull.into());
        }
        self.file.write_at(offset, bytes)
    }

    fn sync(&mut self) -> io::Result<()> {
        let mut world = self.world.lock().unwrap();
        world.plain_gate()?;
        if !world.ignore_sync {
            let length = usize::try_from(self.file.length()?).unwrap();
            let mut content = vec![0; length];
            let mut done = 0;
            while done < length {
                done += self.file.read_at(done as u64, &mut content[done..])?;
            }
            world.durable_content.insert(self.number, content);
        }
        Ok(())
    }

    fn set_len(&mut self, length: u64) -> io::Result<()> {
        self.world.lock().unwrap().plain_gate()?;
        self.file.set_len(length)
    }

    fn length(&mut self) -> io::Result<u64> {
        self.world.lock().unwrap().plain_gate()?;
        self.file.length()
    }
}
