//! What kind of file system a path is on: on network file systems the kernel does not tell what other
//! machines change, and SQLite's WAL mode does not work.

use std::path::Path;

/// `f_type` of statfs(2), from Linux's magic.h and the file systems' own headers:
/// NFS, SMB, CIFS, SMB2, FUSE, 9P, AFS, Ceph, Lustre, GPFS, OCFS2, GFS2.
const NETWORK_FILE_SYSTEMS: [u32; 12] = [
    0x6969,
    0x517b,
    0xff53_4d42,
    0xfe53_4d42,
    0x6573_5546,
    0x0102_1997,
    0x5346_414f,
    0x00c3_6400,
    0x0bd0_0bd0,
    0x4750_4653,
    0x7461_636f,
    0x0116_1970,
];

/// Whether `path` is on a network file system; what cannot be asked counts as local.
pub fn is_on_network(path: &Path) -> bool {
    rustix::fs::statfs(path).is_ok_and(|found| NETWORK_FILE_SYSTEMS.contains(&(found.f_type as u32)))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn local_file_systems_are_local_and_what_is_missing_too() {
        for path in ["/proc", "/sys", "/no such folder"] {
            assert!(!is_on_network(Path::new(path)), "{path}");
        }
    }
}
