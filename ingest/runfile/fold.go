package runfile

import (
	"context"
	"errors"
)

// Bounds of the log ("-wal").
const (
	foldBytes = 4 << 20 // fold when this much has been committed …
	foldEvery = 64      // … or after this many commits, counted as bytes each
	logFrames = 4096    // pages (64 MiB): above it commits are held up for a moment
)

// due notes that about size bytes were committed and wakes Run when folding is
// worth its sync.
func (f *File) due(size int) {
	f.mu.Lock()
	f.pending += size + foldBytes/foldEvery
	wake := f.pending >= foldBytes
	f.mu.Unlock()
	if wake {
		select {
		case f.wake <- struct{}{}:
		default: // one is due already
		}
	}
}

// Run moves committed pages from the log into the file while others commit, on
// a connection of its own, until ctx is done. It starts nothing. Without it the
// log grows until Close. A failure is kept for Log and tried again with the
// next commits: the records are safe in the log.
func (f *File) Run(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case <-f.wake:
			_ = f.Fold(ctx)
		}
	}
}

// Fold moves what it can from the log into the file now. It is what Run does,
// for an owner that rather calls it. It waits for nobody, unless the log has
// grown over 64 MiB: then it takes a writer's turn, for the time to move the
// rest and at most 100 ms for readers, so that the log can begin again.
func (f *File) Fold(ctx context.Context) error {
	if f.fold == nil {
		return f.fault("fold", "file", ErrReadOnly)
	}
	f.mu.Lock()
	f.pending = 0
	f.mu.Unlock()
	frames, err := f.checkpoint(ctx, "PASSIVE")
	if err == nil && frames > logFrames {
		err = f.restart(ctx)
	}
	if err != nil {
		err = f.fault("fold", "file", err)
		if ctx.Err() != nil {
			return err // called off, which says nothing of the disk
		}
	}
	f.mu.Lock()
	f.frames, f.foldErr = frames, err
	f.mu.Unlock()
	return err
}

// restart folds all of the log. It holds the writing connection meanwhile: commits
// that follow each other closely would else never leave SQLite's lock to it.
func (f *File) restart(ctx context.Context) error {
	turn, err := f.write.Conn(ctx)
	if err != nil {
		return err
	}
	_, err = f.checkpoint(ctx, "RESTART")
	return errors.Join(err, turn.Close())
}

func (f *File) checkpoint(ctx context.Context, kind string) (frames int, err error) {
	var busy, moved int // being busy is no fault: the next one moves the rest
	err = f.fold.QueryRowContext(ctx, "PRAGMA wal_checkpoint("+kind+")").Scan(&busy, &frames, &moved)
	return frames, err
}

// Log gives the length of the log in pages of 16 KiB when it was last folded,
// and the error of that, for the health of the archive.
func (f *File) Log() (pages int, err error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.frames, f.foldErr
}
