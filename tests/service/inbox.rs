//! What arrives, and how.

use std::fs;
use std::os::unix::fs::symlink;
use std::os::unix::net::UnixListener;

use emberline::service::output::safe_name;

use crate::support::site::{Site, write_in_pieces};
use crate::support::{AMPLE, wait_until};

#[test]
fn files_that_arrive_are_reported_however_they_arrive() {
    let site = Site::new();
    site.drop_file("before.fits", "object before");
    let mut daemon = site.start();
    site.drop_file("renamed.fit", "object renamed");
    fs::write(site.inbox.join("written.fits.gz"), "object written\nEND\n").unwrap();
    write_in_pieces(&site.inbox.join("pieces.fz"), "object pieces\nEND\n", 4, || {});
    let linked = site.folder.path().join("source");
    fs::write(&linked, "object linked\nEND\n").unwrap();
    fs::hard_link(&linked, site.inbox.join("linked.fits")).unwrap();
    // A folder that is made and filled at once, and one that is moved in full.
    fs::create_dir(site.inbox.join("night")).unwrap();
    fs::write(site.inbox.join("night/new-folder.fits"), "object new-folder\nEND\n").unwrap();
    let full = site.folder.path().join("full");
    fs::create_dir_all(full.join("deep")).unwrap();
    fs::write(full.join("deep/moved.fits"), "object moved\nEND\n").unwrap();
    fs::rename(&full, site.inbox.join("full")).unwrap();
    for object in ["before", "renamed", "written", "pieces", "linked", "new-folder", "moved"] {
        site.wait_for_report(object);
    }
    assert_eq!(daemon.wait_until_idle().jobs.done, 7);
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn what_is_no_spectrum_is_left_alone_for_a_counted_reason() {
    let site = Site::new();
    site.configure("inbox.exclude = [\"bad-*\"]\ninbox.max_file_mb = 0.001");
    let outside = site.folder.path().join("outside.fits");
    fs::write(&outside, "object outside\nEND\n").unwrap();
    symlink(&outside, site.inbox.join("leaves.fits")).unwrap();
    symlink("nowhere.fits", site.inbox.join("dangling.fits")).unwrap();
    let _socket = UnixListener::bind(site.inbox.join("socket.fits")).unwrap();
    rustix::fs::mknodat(
        rustix::fs::CWD,
        site.inbox.join("fifo.fits"),
        rustix::fs::FileType::Fifo,
        rustix::fs::Mode::from(0o600),
        0,
    )
    .unwrap();
    for name in ["notes.txt", ".hidden.fits", "copying.fits.part", "bad-1.fits"] {
        fs::write(site.inbox.join(name), "object wrong\nEND\n").unwrap();
    }
    fs::write(site.inbox.join("empty.fits"), "").unwrap();
    fs::write(site.inbox.join("large.fits"), "x".repeat(2_000)).unwrap();
    site.drop_file("good.fits", "object good");
    symlink("good.fits", site.inbox.join("inside.fits")).unwrap();
    let daemon = site.start();
    site.wait_for_report("good");
    let status = daemon.wait_until_idle();
    let expected = [
        ("empty", 1),
        ("excluded", 1),
        ("link-leaves-folder", 2),
        ("not-regular", 2),
        ("other-ending", 1),
        ("temporary-name", 2),
        ("too-large", 1),
    ];
    let expected = expected.map(|(reason, count)| (reason.to_owned(), count)).into();
    assert_eq!(status.inbox.left_alone, expected);
    assert_eq!(status.jobs.done, 1, "the link to good.fits is the same content");
}

#[test]
fn a_file_that_is_being_written_is_left_alone_until_it_is_closed() {
    let site = Site::new();
    site.configure("inbox.still_s = 3600.0");
    let daemon = site.start();
    let mut pieces = 0;
    write_in_pieces(&site.inbox.join("slow.fits"), "object slow\nEND\n", 3, || {
        pieces += 1;
        site.drop_file(&format!("other-{pieces}.fits"), &format!("object other-{pieces}"));
        // The daemon is awake and has seen the file, yet it does not take it.
        site.wait_for_report(&format!("other-{pieces}"));
        assert_eq!(daemon.status().inbox.not_yet_whole, 1);
        assert!(site.current_report("slow").is_none());
    });
    site.wait_for_report("slow");
}

#[test]
fn a_file_whose_event_the_kernel_lost_is_found_by_a_full_scan() {
    /// The kernel's queue holds 16 384 events (fs.inotify.max_queued_events) by default.
    const RENAMES: usize = 20_000;
    let site = Site::new();
    site.configure("inbox.rescan_interval_s = 36000.0");
    let daemon = site.start();
    daemon.wait_until_idle();
    daemon.signal(rustix::process::Signal::STOP);
    let (here, there) = (site.inbox.join("a.txt"), site.inbox.join("b.txt"));
    fs::write(&here, "").unwrap();
    for _ in 0..RENAMES / 2 {
        fs::rename(&here, &there).unwrap();
        fs::rename(&there, &here).unwrap();
    }
    site.drop_file("late.fits", "object late");
    daemon.signal(rustix::process::Signal::CONT);
    site.wait_for_report("late");
    assert!(daemon.status().inbox.lost_events >= 1);
}

#[test]
fn a_watched_folder_may_itself_be_a_link() {
    let site = Site::new();
    let real = site.folder.path().join("real");
    fs::create_dir(&real).unwrap();
    fs::remove_dir(&site.inbox).unwrap();
    symlink(&real, &site.inbox).unwrap();
    fs::write(real.join("before.fits"), "object before\nEND\n").unwrap();
    let daemon = site.start();
    site.wait_for_report("before");
    site.drop_file("after.fits", "object after");
    site.wait_for_report("after");
    assert_eq!(daemon.status().inbox.folders[0].mode, "events");
}

#[test]
fn polling_finds_the_same_files() {
    let site = Site::new();
    site.configure("inbox.polling = \"always\"\ninbox.poll_interval_s = 0.05");
    let daemon = site.start();
    assert_eq!(daemon.status().inbox.folders[0].mode, "polling");
    site.drop_file("a.fits", "object polled");
    site.wait_for_report("polled");
    fs::write(site.inbox.join("a.fits"), "object replaced\nEND\n").unwrap();
    site.wait_for_report("replaced");
    wait_until("the replaced content has no report in force", AMPLE, || {
        site.current_report("polled").is_none()
    });
}

#[test]
fn a_file_replaced_under_the_same_name_is_a_new_job() {
    let site = Site::new();
    let mut daemon = site.start();
    site.drop_file("a.fits", "object KF-1\n# first");
    site.wait_for_report("KF-1");
    let first = site.current_report("KF-1").unwrap();
    site.drop_file("a.fits", "object KF-1\n# second");
    wait_until("the second content is in force", AMPLE, || {
        daemon.status().jobs.done == 2 && daemon.wait_until_idle().jobs.done == 2
    });
    let second = site.current_report("KF-1").unwrap();
    assert_ne!(first["source"]["blake3"], second["source"]["blake3"]);
    // Back to the first: the same bytes are in force again, and nothing was written twice.
    site.drop_file("a.fits", "object KF-1\n# first");
    wait_until("the first content is in force again", AMPLE, || {
        daemon.wait_until_idle();
        site.current_report("KF-1").as_ref() == Some(&first)
    });
    assert_eq!(daemon.stop(), 0);
    let reports = site.all_reports();
    assert_eq!(reports.len(), 3, "two reports and one pointer: {reports:?}");
}

#[test]
fn names_from_the_outside_are_made_safe_and_stay_unique() {
    let long = "x".repeat(10_000);
    let names = [
        "KF J0102+0304",
        "../../etc/passwd",
        "a/b",
        "a_b",
        "",
        ".",
        "..",
        "ä",
        "ö",
        "\u{202e}evil",
        "a\0b",
        &long,
        "-rf",
        "a~b",
        "KF-1",
    ];
    let mut safe: Vec<String> = names.iter().map(|name| safe_name(name)).collect();
    for name in &safe {
        assert!(
            !name.is_empty() && name.len() <= 100 && !name.starts_with('.') && !name.contains('/'),
            "{name}"
        );
        assert!(name.chars().all(|c| c.is_ascii_alphanumeric() || "+-_.~".contains(c)), "{name}");
    }
    assert_eq!(safe_name("KF-1"), "KF-1", "ordinary names stay as they are");
    safe.sort();
    safe.dedup();
    assert_eq!(safe.len(), names.len());
    // A name that was made safe is not the plain name of another object.
    assert_ne!(safe_name(&safe_name("a/b")), safe_name("a/b"));
}

#[test]
fn several_objects_of_one_name_in_one_file_keep_apart() {
    let site = Site::new();
    site.drop_file("many.fits", "object KF-1\nobject KF-1\nobject ../KF-2");
    assert_eq!(site.drain(), 0);
    let pointers = site
        .all_reports()
        .into_iter()
        .filter(|path| path.to_string_lossy().ends_with(".current.json"))
        .count();
    assert_eq!(pointers, 3);
    assert!(site.all_reports().iter().all(|path| path.starts_with(&site.reports)));
}
