//! The child: takes open files from the daemon, reads them, answers.

use std::fs::File;
use std::io::{self, IoSlice, IoSliceMut, Read, Write};
use std::mem::MaybeUninit;
use std::os::fd::{AsFd, OwnedFd};
use std::os::unix::net::UnixStream;

use rustix::net::{
    RecvAncillaryBuffer, RecvAncillaryMessage, RecvFlags, SendAncillaryBuffer, SendAncillaryMessage,
    SendFlags, recvmsg, sendmsg,
};

use super::message::{self, FRAME_HEAD_BYTES, LONGEST_REQUEST_BYTES, Orders, Reply, Request};
use super::sandbox;
use crate::spectrum::{Outcomes, read_open_file};

/// The hidden command that turns the program into a reader.
pub const COMMAND: &str = "reader-process";

/// Reads files for the daemon at the other end of standard input until it hangs up.
///
/// # Errors
/// What came is no message, or the daemon is gone in the middle of one.
pub fn run() -> io::Result<()> {
    let mut daemon = UnixStream::from(io::stdin().as_fd().try_clone_to_owned()?);
    let (orders, _): (Orders, u64) = message::read(&mut daemon, LONGEST_REQUEST_BYTES)?;
    let settings = orders.settings()?;
    let containment = sandbox::enter(orders.limits);
    message::write(&mut daemon, &Reply::Ready(containment))?;
    while let Some((request, file)) = receive(&mut daemon)? {
        sandbox::allow_time_for_a_file(orders.limits);
        let outcomes = read_open_file(file, request.shown_path, &settings);
        answer(&mut daemon, outcomes)?;
    }
    Ok(())
}

fn answer(daemon: &mut UnixStream, outcomes: Outcomes) -> io::Result<()> {
    for outcome in outcomes {
        let reply = match outcome {
            Ok(observation) => Reply::Read(Box::new(observation)),
            Err(refusal) => Reply::Refused(Box::new((*refusal).into())),
        };
        message::write(daemon, &reply)?;
    }
    message::write(daemon, &Reply::Done)
}

/// The next file, or nothing when the daemon has hung up.
fn receive(daemon: &mut UnixStream) -> io::Result<Option<(Request, File)>> {
    let mut head = [0; FRAME_HEAD_BYTES];
    let mut room = [MaybeUninit::uninit(); rustix::cmsg_space!(ScmRights(1))];
    let mut beside = RecvAncillaryBuffer::new(&mut room);
    let received =
        recvmsg(&*daemon, &mut [IoSliceMut::new(&mut head)], &mut beside, RecvFlags::CMSG_CLOEXEC)?.bytes;
    if received == 0 {
        return Ok(None);
    }
    let descriptor: Option<OwnedFd> = beside.drain().find_map(|message| match message {
        RecvAncillaryMessage::ScmRights(mut descriptors) => descriptors.next(),
        _ => None,
    });
    daemon.read_exact(&mut head[received..])?;
    let (request, _) = message::read_after(&head, daemon, LONGEST_REQUEST_BYTES)?;
    let descriptor = descriptor.ok_or_else(|| io::Error::other("found a request without a file"))?;
    Ok(Some((request, File::from(descriptor))))
}

/// Sends a request with the open file beside it; the daemon's half of [`receive`].
pub fn send(reader: &mut UnixStream, request: &Request, file: &File) -> io::Result<()> {
    let frame = message::to_frame(request)?;
    let descriptors = [file.as_fd()];
    let mut room = [MaybeUninit::uninit(); rustix::cmsg_space!(ScmRights(1))];
    let mut beside = SendAncillaryBuffer::new(&mut room);
    beside.push(SendAncillaryMessage::ScmRights(&descriptors));
    let sent = sendmsg(&*reader, &[IoSlice::new(&frame)], &mut beside, SendFlags::NOSIGNAL)?;
    reader.write_all(&frame[sent..])
}
