// Package batch carries out a piece of work for each of many takes, on one
// machine or on many, so that every result is there once and whole whatever
// happens on the way. It knows paths and outcomes, not sound: what is done to a
// take is a function of the caller.
//
// # Conventions
//
// A Plan is made once. It lists the takes in the order of their keys, each with
// the files it is read from, their sizes, and the recipe (rig, options, program
// version) that it is made by. The same folder gives the same bytes, and PlanID
// is their hash. Parts are balanced by bytes and are no part of the hash: one
// plan may be cut into any number of parts.
//
// Everything of a take is written into a folder of its own below .staging of
// the output folder, synced, and then renamed to its final name, the take's
// key. A folder with a final name is whole: outcome.json in it says what was
// made, from which files, by which recipe, with a checksum of its own. There
// are no locks and no claims. Where two runs make the same take, one rename
// comes first and the other run drops what it made.
//
// A take that fails for a reason of its own is committed as well, with the
// reason. Storage that fails is not the take's fault: the take stays open.
//
// A run leaves a ledger, lines of JSON with a checksum each, synced line by
// line, in a file of its own below .ledger. A later run reads all ledgers and
// so finds out what is done without opening every folder; the folders decide
// where the ledger says nothing. A take is done when recipe and files agree:
// size and time of change at a glance, otherwise the SHA-256.
//
// Paths in plans and outcomes have slashes and are relative to the root of the
// takes, which may be mounted elsewhere on another machine.
//
// # Use
//
//	plan, err := batch.NewPlan(batch.Draft{Version: "1.0", Root: ".", Folder: "out", Recipes: recipes, Takes: takes, Parts: 1})
//	if err != nil {
//		return err
//	}
//	do := func(ctx context.Context, a batch.Assignment) (batch.Report, error) {
//		return batch.Report{}, work(ctx, a.Paths(), a.Folder) // writes into a.Folder
//	}
//	tally, err := batch.Run(ctx, plan, do, batch.Settings{Root: root, Out: out, Workers: 2, Now: time.Now}, batch.Observer{})
//	summary, err := batch.Merge(plan, batch.MergeSettings{Out: out})
//
// Longer than 2,000 lines because plan, staging, resume and merge share one form
// of result on disk, which nothing else should know.
//
// # Sources
//
// Longest processing time first: Graham, R. L., "Bounds on multiprocessing
// timing anomalies", SIAM Journal on Applied Mathematics 17(2), 1969. Renaming
// a folder onto one that is not empty fails: IEEE Std 1003.1-2017, rename().
// Mean directions: Fisher, N. I., "Statistical Analysis of Circular Data",
// Cambridge 1993, 2.3.1. CRC-32C: RFC 3720, appendix B.4.
package batch
