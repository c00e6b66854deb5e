//! One cancellation value: given to everything that waits, raised by Ctrl-C, a stop control or a dying parent.

use tokio::sync::watch;

/// Raises the stop; clones raise the same one.
#[derive(Debug, Clone)]
pub struct Stopper(watch::Sender<bool>);

/// Tells whether the stop was raised; clones tell the same.
#[derive(Debug, Clone)]
pub struct Stop(watch::Receiver<bool>);

impl Stop {
    /// A stop that has not been raised, and what raises it.
    pub fn new() -> (Stopper, Stop) {
        let (sender, receiver) = watch::channel(false);
        (Stopper(sender), Stop(receiver))
    }

    /// Returns once the stop is raised; never returns if nothing can raise it any more.
    pub async fn raised(&self) {
        let mut receiver = self.0.clone();
        if receiver.wait_for(|raised| *raised).await.is_err() {
            std::future::pending::<()>().await;
        }
    }
}

impl Stopper {
    /// Raises the stop.
    pub fn raise(&self) {
        self.0.send_replace(true);
    }
}
