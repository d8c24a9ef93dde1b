//! What a reader gives up before it sees the first file.
//!
//! Three locks, one behind the other. Limits of the process: memory, processor time, size of files,
//! no core dump. Landlock: no file or folder, no port, no signal or socket outside. A filter of
//! system calls: only what reading needs; a file may be opened for reading alone (the C library opens its
//! sealed memory through `/proc/self/fd`), everything else fails with EPERM, also on kernels without
//! Landlock. What the kernel does not offer is told, and the daemon writes it into its log.

use std::collections::BTreeMap;
use std::error::Error;

use landlock::{ABI, Access, AccessFs, AccessNet, Ruleset, RulesetAttr, RulesetStatus, Scope};
use rustix::process::{Resource, Rlimit, getrlimit, setrlimit};
use rustix::time::{ClockId, clock_gettime};
use seccompiler::{
    BpfProgram, SeccompAction, SeccompCmpArgLen, SeccompCmpOp, SeccompCondition, SeccompFilter, SeccompRule,
};

use super::message::{Containment, Limits};

/// Open files of a reader: two for each extension that is open in the C library.
const MOST_FILES: u64 = 1024;

/// Locks this process in, as far as the kernel can.
pub fn enter(limits: Limits) -> Containment {
    let mut containment = Containment::default();
    let mut note = |what: &str, outcome: Result<(), Box<dyn Error>>| match outcome {
        Ok(()) => true,
        Err(fault) => {
            containment.missing.push(format!("{what} ({fault})"));
            false
        }
    };
    let has_memory_limit = note("limit of memory", limit_process(limits));
    let has_landlock = note("Landlock", restrict_files_and_ports());
    let has_seccomp = note("filter of system calls", filter_system_calls());
    Containment { has_landlock, has_seccomp, has_memory_limit, ..containment }
}

fn limit_process(limits: Limits) -> Result<(), Box<dyn Error>> {
    for (resource, most) in [
        (Resource::As, limits.memory_bytes),
        // Of the copies in anonymous memory; nothing else can be written.
        (Resource::Fsize, limits.memory_bytes),
        (Resource::Nofile, MOST_FILES),
        (Resource::Core, 0),
    ] {
        let before = getrlimit(resource).maximum;
        let most = before.map_or(most, |before| most.min(before));
        setrlimit(resource, Rlimit { current: Some(most), maximum: Some(most) })?;
    }
    Ok(())
}

/// Lets this process use the processor for one more file. The daemon keeps the time; this ends a hanging
/// reader whose daemon is gone.
pub fn allow_time_for_a_file(limits: Limits) {
    let used_s = clock_gettime(ClockId::ProcessCPUTime).tv_sec.unsigned_abs();
    let allowed_s = limits.time_s.ceil().max(1.0) as u64;
    let current = Some(used_s.saturating_add(allowed_s).saturating_add(1));
    let maximum = getrlimit(Resource::Cpu).maximum;
    // Where the system keeps it from being set, only the second line of defence is missing.
    let _ = setrlimit(Resource::Cpu, Rlimit { current, maximum });
}

fn restrict_files_and_ports() -> Result<(), Box<dyn Error>> {
    let abi = ABI::V6;
    let status = Ruleset::default()
        .handle_access(AccessFs::from_all(abi))?
        .handle_access(AccessNet::from_all(abi))?
        .scope(Scope::from_all(abi))?
        .create()?
        .restrict_self()?;
    match status.ruleset {
        RulesetStatus::FullyEnforced => Ok(()),
        RulesetStatus::PartiallyEnforced => Err("this kernel has only part of it".into()),
        RulesetStatus::NotEnforced => Err("this kernel does not have it, or it is switched off".into()),
    }
}

fn filter_system_calls() -> Result<(), Box<dyn Error>> {
    let mut rules: BTreeMap<i64, Vec<SeccompRule>> = BTreeMap::new();
    for &call in NEEDED_CALLS {
        rules.insert(call, Vec::new());
    }
    rules.insert(libc::SYS_openat, vec![read_only(2)?]);
    #[cfg(target_arch = "x86_64")]
    rules.insert(libc::SYS_open, vec![read_only(1)?]);
    let refuse = SeccompAction::Errno(libc::EPERM as u32);
    let filter = SeccompFilter::new(rules, refuse, SeccompAction::Allow, std::env::consts::ARCH.try_into()?)?;
    let program: BpfProgram = filter.try_into()?;
    seccompiler::apply_filter(&program)?;
    Ok(())
}

/// Agrees where the flags in this argument ask for nothing but reading.
fn read_only(argument: u8) -> Result<SeccompRule, Box<dyn Error>> {
    let writing = libc::O_WRONLY | libc::O_RDWR | libc::O_CREAT | libc::O_TRUNC | libc::O_APPEND;
    let mask = SeccompCmpOp::MaskedEq(u64::from(writing.cast_unsigned()));
    Ok(SeccompRule::new(vec![SeccompCondition::new(argument, SeccompCmpArgLen::Dword, mask, 0)?])?)
}

/// Memory, the one socket, anonymous files, clocks, and the ends of a process.
const NEEDED_CALLS: &[i64] = &[
    libc::SYS_brk,
    libc::SYS_mmap,
    libc::SYS_munmap,
    libc::SYS_mremap,
    libc::SYS_mprotect,
    libc::SYS_madvise,
    libc::SYS_read,
    libc::SYS_readv,
    libc::SYS_pread64,
    libc::SYS_write,
    libc::SYS_writev,
    libc::SYS_recvmsg,
    libc::SYS_recvfrom,
    libc::SYS_sendto,
    libc::SYS_close,
    libc::SYS_lseek,
    libc::SYS_fstat,
    libc::SYS_newfstatat,
    libc::SYS_statx,
    libc::SYS_fcntl,
    libc::SYS_memfd_create,
    libc::SYS_getcwd,
    libc::SYS_getrandom,
    libc::SYS_futex,
    libc::SYS_clock_gettime,
    libc::SYS_getpid,
    libc::SYS_gettid,
    libc::SYS_tgkill,
    libc::SYS_sched_yield,
    libc::SYS_prlimit64,
    libc::SYS_rt_sigaction,
    libc::SYS_rt_sigprocmask,
    libc::SYS_rt_sigreturn,
    libc::SYS_sigaltstack,
    libc::SYS_exit,
    libc::SYS_exit_group,
];

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use std::fs::{self, File};
    use std::io::ErrorKind;
    use std::net::{TcpListener, TcpStream};
    use std::process::Command;

    /// Tries what a reader must not do; says what could be done.
    fn misdeeds(folder: &std::path::Path, address: std::net::SocketAddr) -> Vec<&'static str> {
        let mut done = Vec::new();
        let refused = |error: &std::io::Error| error.kind() == ErrorKind::PermissionDenied;
        let mut note = |what, outcome: Result<(), std::io::Error>| match outcome {
            Ok(()) => done.push(what),
            Err(error) => assert!(refused(&error), "{what}: {error}"),
        };
        note("create", File::create(folder.join("new")).map(drop));
        note("append", File::options().append(true).open(folder.join("old")).map(drop));
        note("rename", fs::rename(folder.join("named"), folder.join("other")));
        note("remove", fs::remove_file(folder.join("spare")));
        note("link", std::os::unix::fs::symlink("old", folder.join("link")));
        note("connect", TcpStream::connect(address).map(drop));
        note("listen", TcpListener::bind("127.0.0.1:0").map(drop));
        note("run", Command::new("/bin/true").status().map(drop));
        note("read", fs::read(folder.join("old")).map(drop));
        done
    }

    // Both locks hold for the calling thread only, so that a test can try them in a thread of its own.
    fn try_behind(lock: fn() -> Result<(), Box<dyn Error>>) -> Option<Vec<&'static str>> {
        let folder = tempfile::tempdir().unwrap();
        for name in ["old", "named", "spare"] {
            fs::write(folder.path().join(name), "text").unwrap();
        }
        let listener = TcpListener::bind("127.0.0.1:0").unwrap();
        let (path, address) = (folder.path().to_owned(), listener.local_addr().unwrap());
        std::thread::spawn(move || match lock() {
            Ok(()) => Some(misdeeds(&path, address)),
            Err(fault) => {
                eprintln!("not tried: {fault}");
                None
            }
        })
        .join()
        .unwrap()
    }

    #[test]
    fn without_a_sandbox_all_of_it_can_be_done() {
        let all = ["create", "append", "rename", "remove", "link", "connect", "listen", "run", "read"];
        assert_eq!(try_behind(|| Ok(())).unwrap(), all);
    }

    #[test]
    fn the_filter_leaves_reading_only() {
        assert_eq!(try_behind(filter_system_calls).unwrap(), ["read"]);
    }

    #[test]
    fn landlock_leaves_nothing_where_the_kernel_has_it() {
        if let Some(done) = try_behind(restrict_files_and_ports) {
            assert!(done.is_empty(), "{done:?}");
        }
    }
}
