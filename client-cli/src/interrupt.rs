//! Ctrl-C: the first asks the command to stop in good order, the second ends the process at once.

use tokio::sync::watch;

use crate::exit::Exit;

/// Tells whether somebody wants the command to stop.
#[derive(Debug, Clone)]
pub struct Interrupt(watch::Receiver<bool>);

impl Interrupt {
    /// An interrupt, and the switch that raises it.
    pub fn with_switch() -> (Self, watch::Sender<bool>) {
        let (switch, receiver) = watch::channel(false);
        (Self(receiver), switch)
    }

    /// An interrupt that never comes.
    pub fn never() -> Self {
        Self::with_switch().0
    }

    /// Resolves when it is raised.
    pub async fn raised(mut self) {
        if self.0.wait_for(|raised| *raised).await.is_err() {
            // The switch is gone: nobody can raise it any more.
            std::future::pending::<()>().await;
        }
    }
}

/// The interrupt of this process.
pub fn on_ctrl_c() -> Interrupt {
    let (interrupt, switch) = Interrupt::with_switch();
    tokio::spawn(async move {
        if tokio::signal::ctrl_c().await.is_err() {
            return;
        }
        switch.send_replace(true);
        if tokio::signal::ctrl_c().await.is_ok() {
            std::process::exit(i32::from(Exit::Interrupted.code()));
        }
    });
    interrupt
}
