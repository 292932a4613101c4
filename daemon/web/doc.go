// Package web serves the status pages, the metrics and the probes of the
// service.
//
//	GET /                       what happens now: queue, attention, last shots, stations
//	GET /shots                  the table; station, state, verdict, text and after in the address
//	GET /shot/{id}              one shot: verdict, numbers, pictures, downloads, attempts
//	GET /shot/{id}/file/{name}  one result file out of a fixed list of names
//	GET /events                 server-sent events; a page that is open fetches itself again
//	GET /metrics                Prometheus text format
//	GET /livez                  200 while the main loop turns
//	GET /readyz                 200 while every named check passes; ?verbose lists them
//	GET /version                build facts as JSON
//
// The pages are html/template files embedded into the program. There is no
// build step and no foreign script: one style sheet and one short script of
// our own are served under names that carry their hash. Without script the
// pages reload themselves.
//
// # What the server may cost
//
// The work on shots comes first. The state shown on every page is one
// Snapshot that is asked for at most once a second, however many pages are
// open; an event stream carries only the word "changed", at most once a
// second; streams and downloads are bounded in number. Nothing is read while
// nobody looks.
//
// # Who may look
//
// There is no authentication, so Listen refuses every address that is not
// loopback. A page of another site that has its name resolved to 127.0.0.1
// is turned away by the Host header, and cross-origin writes by
// http.CrossOriginProtection (there are no writes: only GET and HEAD are
// answered). Result files are served with a sandboxing content policy, for
// an SVG is a document.
//
// # Goroutines
//
// New and Handler start nothing. Run owns the HTTP server and one loop that
// hands the Source's hint on to the streams; it returns when both are gone.
// The Source's methods run on the goroutine of the request that needs them
// and must honour its context.
package web
