//! A panic turned into words: we were wrong, but the coils are still energised, and someone has to act.

use std::any::Any;
use std::future::{Future, poll_fn};
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::task::Poll;

/// Awaits a future; a panic in it becomes its message.
///
/// What the future borrowed may be in any state afterwards: callers go on only to make things safe, or
/// with state that a driver re-establishes by itself.
///
/// # Errors
/// The panic's message.
pub async fn catch<F: Future>(future: F) -> Result<F::Output, String> {
    let mut future = std::pin::pin!(future);
    poll_fn(
        move |task| match catch_unwind(AssertUnwindSafe(|| future.as_mut().poll(task))) {
            Ok(Poll::Pending) => Poll::Pending,
            Ok(Poll::Ready(value)) => Poll::Ready(Ok(value)),
            Err(panic) => Poll::Ready(Err(words(panic.as_ref()))),
        },
    )
    .await
}

fn words(panic: &(dyn Any + Send)) -> String {
    if let Some(text) = panic.downcast_ref::<&str>() {
        (*text).to_owned()
    } else if let Some(text) = panic.downcast_ref::<String>() {
        text.clone()
    } else {
        "no message".to_owned()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn a_panic_becomes_its_message() {
        assert_eq!(catch(async { 3 }).await, Ok(3));
        let panicking = async {
            tokio::task::yield_now().await;
            panic!("a broken {}", "assertion")
        };
        let caught: Result<(), String> = catch(panicking).await;
        assert_eq!(caught, Err("a broken assertion".to_owned()));
    }
}
