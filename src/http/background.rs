//! A service on a thread of its own, for the demo and for tests.

use std::io;
use std::net::SocketAddr;
use std::sync::{Arc, mpsc};
use std::thread::JoinHandle;
use std::time::Duration;

use tokio::sync::oneshot;

use super::documents::Work;
use super::listen::{bind, runtime};
use super::settings::Settings;

/// How long threads of abandoned jobs may take to notice that the service has ended.
pub const THREADS_END: Duration = Duration::from_secs(2);

/// A running service; it stops in order when dropped.
#[derive(Debug)]
pub struct Running {
    address: SocketAddr,
    stop: Option<oneshot::Sender<()>>,
    thread: Option<JoinHandle<()>>,
}

impl Running {
    /// Starts the service and returns once it listens.
    ///
    /// # Errors
    /// When the address is taken or the system grants no threads.
    pub fn start(settings: Settings, work: Arc<dyn Work>) -> io::Result<Running> {
        let (tell, told) = mpsc::channel();
        let (stop, stopped) = oneshot::channel();
        let runtime = runtime(&settings)?;
        let thread = std::thread::Builder::new().name("underfoot-service".to_owned()).spawn(move || {
            runtime.block_on(async {
                match bind(settings, work).await {
                    Ok(bound) => {
                        let _ = tell.send(Ok(bound.address()));
                        // A dropped sender asks for the end as well.
                        bound.run(async { drop(stopped.await) }).await;
                    }
                    Err(error) => drop(tell.send(Err(error))),
                }
            });
            runtime.shutdown_timeout(THREADS_END);
        })?;
        let address = told.recv().map_err(|_| io::Error::other("the service's thread ended at once"))??;
        Ok(Running { address, stop: Some(stop), thread: Some(thread) })
    }

    /// Where it listens.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// Asks the service to end, without waiting.
    pub fn ask_to_stop(&mut self) {
        if let Some(stop) = self.stop.take() {
            let _ = stop.send(());
        }
    }

    /// Waits until the service has ended, which it does only when asked.
    pub fn wait(&mut self) {
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        self.ask_to_stop();
        self.wait();
    }
}
