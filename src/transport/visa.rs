//! Addresses that only a VISA library reaches. The library is loaded at run time; its calls block, so they run on threads
//! made for that, each with its own timeout.

use super::{Chunk, Link, LinkError, LinkErrorKind, Wire};
use std::{
    io::{self, Read, Write},
    sync::Arc,
};
use tokio::{task::spawn_blocking, time::Instant};
use visa_rs::{
    enums::attribute::{AttrTmoValue, HasAttribute},
    prelude::{AccessMode, AsResourceManager, DefaultRM, Instrument},
};

struct Visa {
    instrument: Arc<Instrument>,
    /// Closing it closes the instrument with it.
    _manager: Arc<DefaultRM>,
}

pub(super) async fn open(address: &str, deadline: Instant) -> Result<Box<dyn Link>, LinkError> {
    let address = address.to_owned();
    blocking("open", move || open_blocking(&address, deadline)).await
}

fn open_blocking(address: &str, deadline: Instant) -> Result<Box<dyn Link>, LinkError> {
    // Before anything else: the first call into a library that is not there would end the program.
    visa_sys::load_visa_library().map_err(|error| {
        let doing = format!("load the VISA library: {error}; install one, or use a raw socket or serial address");
        LinkError::new(LinkErrorKind::NotSupported, doing)
    })?;
    let failed = |error| LinkError::system(format!("open {address}"), io::Error::other(error));
    let manager = DefaultRM::new().map_err(failed)?;
    let resource = visa_rs::VisaString::from_string(address.to_owned())
        .ok_or_else(|| LinkError::new(LinkErrorKind::NotFound, format!("open {address}: it holds a zero byte")))?;
    let patience = deadline.saturating_duration_since(Instant::now());
    let instrument = manager.open(&resource, AccessMode::NO_LOCK, patience).map_err(failed)?;
    Ok(Box::new(Visa { instrument: Arc::new(instrument), _manager: Arc::new(manager) }))
}

async fn blocking<T: Send + 'static>(
    doing: &'static str,
    call: impl FnOnce() -> Result<T, LinkError> + Send + 'static,
) -> Result<T, LinkError> {
    let ended = spawn_blocking(call).await;
    ended.unwrap_or_else(|_| Err(LinkError::new(LinkErrorKind::Failed, format!("{doing}: the VISA library gave up"))))
}

fn set_timeout(instrument: &Instrument, deadline: Instant) -> Result<(), LinkError> {
    let left = deadline.saturating_duration_since(Instant::now()).as_millis().clamp(1, 600_000);
    let timeout = u32::try_from(left).ok().and_then(AttrTmoValue::new_checked);
    let timeout = timeout.ok_or_else(|| LinkError::new(LinkErrorKind::Failed, "set the timeout"))?;
    instrument.set_attr(timeout).map_err(|error| LinkError::system("set the timeout", io::Error::other(error)))
}

impl Link for Visa {
    fn write<'a>(&'a mut self, bytes: &'a [u8], deadline: Instant) -> Wire<'a, ()> {
        let (instrument, bytes) = (self.instrument.clone(), bytes.to_vec());
        Box::pin(blocking("write", move || {
            set_timeout(&instrument, deadline)?;
            (&*instrument).write_all(&bytes).map_err(|error| LinkError::system("write", error))
        }))
    }

    fn read(&mut self, deadline: Instant) -> Wire<'_, Chunk> {
        let instrument = self.instrument.clone();
        Box::pin(blocking("read", move || {
            set_timeout(&instrument, deadline)?;
            let mut bytes = vec![0; 64 * 1024];
            let count = (&*instrument).read(&mut bytes).map_err(|error| LinkError::system("read", error))?;
            // A read that stops short of its buffer was stopped by the end of the message.
            let end = count < bytes.len();
            bytes.truncate(count);
            Ok(Chunk { bytes, end })
        }))
    }

    fn take_arrived(&mut self) -> Wire<'_, Vec<u8>> {
        // The library hands over whole answers only; nothing waits on this side.
        Box::pin(async { Ok(Vec::new()) })
    }

    fn close(&mut self) -> Wire<'_, ()> {
        let instrument = self.instrument.clone();
        Box::pin(blocking("close", move || {
            // An answer that nobody fetched would greet the next user: clear what can be cleared.
            let _ = instrument.clear();
            Ok(())
        }))
    }
}
