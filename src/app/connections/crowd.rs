//! All open connections: how many, which are at work, and which has rested longest.

use std::collections::HashMap;
use std::sync::atomic::{AtomicBool, AtomicU64, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::Instant;

use metrics::gauge;
use tokio::sync::Notify;

/// The open connections.
#[derive(Debug, Clone)]
pub struct Crowd {
    inner: Arc<Inner>,
}

#[derive(Debug)]
struct Inner {
    open: Mutex<HashMap<u64, Arc<Activity>>>,
    spare: Mutex<HashMap<u64, Arc<Activity>>>,
    next: AtomicU64,
    begun: Instant,
}

/// What a connection is doing.
#[derive(Debug)]
pub struct Activity {
    begun: Instant,
    requests: AtomicUsize,
    sending: AtomicBool,
    /// Whether a request has ever come.
    heard: AtomicBool,
    /// When it was opened or something was last sent by it, milliseconds.
    active: AtomicU64,
    /// Whether it was asked to go: once is enough.
    asked: AtomicBool,
    go: Notify,
}

/// A connection's place among all, given back when dropped.
#[derive(Debug)]
pub struct Member {
    crowd: Arc<Inner>,
    id: u64,
    spare: bool,
    activity: Arc<Activity>,
}

/// A request in work, until dropped.
#[derive(Debug)]
pub struct InWork(Arc<Activity>);

impl Default for Crowd {
    fn default() -> Self {
        let (open, spare) = (Mutex::default(), Mutex::default());
        Self { inner: Arc::new(Inner { open, spare, next: AtomicU64::new(0), begun: Instant::now() }) }
    }
}

impl Crowd {
    /// Connections that are not spare ones.
    pub fn len(&self) -> usize {
        locked(&self.inner.open).len()
    }

    /// Asks the connection to go that has rested longest, those before all others that have never asked for anything; false when all
    /// are at work. One that sends heads or bodies slowly, but has no request in work, rests.
    pub fn let_one_go(&self) -> bool {
        let mut open = locked(&self.inner.open);
        let resting = open.iter().filter(|(_, activity)| activity.rests() && !activity.asked.load(Ordering::Relaxed));
        let Some((&id, _)) = resting.min_by_key(|(_, activity)| (!activity.is_new(), activity.since())) else {
            return false;
        };
        // Its place is another's at once: it is closed when its task runs next.
        if let Some(activity) = open.remove(&id) {
            activity.ask_to_go();
        }
        true
    }

    /// A place for a connection.
    pub fn join(&self) -> Member {
        Member::new(self.inner.clone(), false, &mut locked(&self.inner.open))
    }

    /// A place beyond all places, of which there are `most`. Who has held one longest without asking for anything gives it up.
    pub fn join_spare(&self, most: usize) -> Option<Member> {
        let mut spare = locked(&self.inner.spare);
        if spare.len() >= most {
            let silent = spare.iter().filter(|(_, activity)| activity.is_new());
            let (&id, _) = silent.min_by_key(|(_, activity)| activity.since())?;
            if let Some(activity) = spare.remove(&id) {
                activity.ask_to_go();
            }
        }
        Some(Member::new(self.inner.clone(), true, &mut spare))
    }
}

fn locked<T>(map: &Mutex<T>) -> MutexGuard<'_, T> {
    // A map is whole between any two statements, whoever panicked in between.
    map.lock().unwrap_or_else(PoisonError::into_inner)
}

impl Member {
    fn new(crowd: Arc<Inner>, spare: bool, places: &mut HashMap<u64, Arc<Activity>>) -> Self {
        gauge!("tailcast_http_connections").increment(1.0);
        let (id, activity) = (crowd.next.fetch_add(1, Ordering::Relaxed), Arc::new(Activity::new(crowd.begun)));
        places.insert(id, activity.clone());
        Self { crowd, id, spare, activity }
    }

    /// What the connection is doing.
    pub fn activity(&self) -> &Arc<Activity> {
        &self.activity
    }
}

impl Drop for Member {
    fn drop(&mut self) {
        let places = if self.spare { &self.crowd.spare } else { &self.crowd.open };
        locked(places).remove(&self.id);
        gauge!("tailcast_http_connections").decrement(1.0);
    }
}

impl Activity {
    fn new(begun: Instant) -> Self {
        let activity = Self {
            begun,
            requests: AtomicUsize::new(0),
            sending: AtomicBool::new(false),
            heard: AtomicBool::new(false),
            active: AtomicU64::new(0),
            asked: AtomicBool::new(false),
            go: Notify::new(),
        };
        activity.note_sent();
        activity
    }

    /// Begins a request.
    pub fn begin(self: &Arc<Self>) -> InWork {
        self.requests.fetch_add(1, Ordering::Relaxed);
        InWork(self.clone())
    }

    /// Notes that a request has come.
    pub fn note_heard(&self) {
        self.heard.store(true, Ordering::Relaxed);
    }

    /// Whether no request has come yet.
    pub fn is_new(&self) -> bool {
        !self.heard.load(Ordering::Relaxed)
    }

    /// Notes that something was sent.
    pub fn note_sent(&self) {
        self.active.store(self.begun.elapsed().as_millis() as u64, Ordering::Relaxed); // 2^64 ms are 584 million years
    }

    /// Notes whether more is to be sent than the client has taken yet.
    pub fn note_sending(&self, sending: bool) {
        self.sending.store(sending, Ordering::Relaxed);
    }

    /// Whether it has no request in work and nothing to send.
    pub fn rests(&self) -> bool {
        self.requests.load(Ordering::Relaxed) == 0 && !self.sending.load(Ordering::Relaxed)
    }

    /// When it was opened or last sent something.
    fn since(&self) -> u64 {
        self.active.load(Ordering::Relaxed)
    }

    fn ask_to_go(&self) {
        self.asked.store(true, Ordering::Relaxed);
        self.go.notify_one();
    }

    /// Returns when the connection is asked to go.
    pub async fn asked_to_go(&self) {
        self.go.notified().await;
    }
}

impl Drop for InWork {
    fn drop(&mut self) {
        self.0.requests.fetch_sub(1, Ordering::Relaxed);
    }
}

#[cfg(test)]
mod tests {
    use std::thread::sleep;
    use std::time::Duration;

    use super::*;

    #[test]
    fn the_one_that_rested_longest_goes_and_none_that_is_at_work() {
        let crowd = Crowd::default();
        let members: Vec<Member> = (0..4)
            .map(|_| {
                sleep(Duration::from_millis(3));
                crowd.join()
            })
            .collect();
        let at_work = members[0].activity().begin();
        members[1].activity().note_sending(true);
        sleep(Duration::from_millis(3));
        members[2].activity().note_sent();
        for gone in [3, 2] {
            assert!(crowd.let_one_go());
            assert!(members[gone].activity().asked.load(Ordering::Relaxed), "{gone}");
        }
        assert!(!crowd.let_one_go() && crowd.len() == 2);
        drop(at_work);
        assert!(crowd.let_one_go() && !crowd.let_one_go());
        members[1].activity().note_sending(false);
        assert!(crowd.let_one_go() && crowd.len() == 0);
    }

    #[test]
    fn spare_places_are_counted() {
        let crowd = Crowd::default();
        let first = crowd.join_spare(1).unwrap();
        first.activity().note_heard();
        assert!(crowd.join_spare(1).is_none() && crowd.len() == 0);
        drop(first);
        let silent = crowd.join_spare(1).unwrap();
        let next = crowd.join_spare(1).unwrap();
        assert!(silent.activity().asked.load(Ordering::Relaxed) && !next.activity().asked.load(Ordering::Relaxed));
        drop(silent);
        assert_eq!(locked(&crowd.inner.spare).len(), 1);
    }

    #[test]
    fn who_never_asked_goes_before_who_did() {
        let crowd = Crowd::default();
        let asked = crowd.join();
        asked.activity().note_heard();
        sleep(Duration::from_millis(3));
        let silent = crowd.join();
        assert!(crowd.let_one_go());
        assert!(silent.activity().asked.load(Ordering::Relaxed) && !asked.activity().asked.load(Ordering::Relaxed));
    }
}
