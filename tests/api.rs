//! The HTTP contract, checked by expected JSON on the service itself; one test goes over a socket.
//!
//! The site is the invented one of the Lower Saltmarsh; every figure here is made up.

#[path = "api/now.rs"]
mod now;
#[path = "api/past.rs"]
mod past;
#[path = "api/served.rs"]
mod served;
#[path = "api/support.rs"]
mod support;
#[path = "api/wrong.rs"]
mod wrong;
