package runfile

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
)

const (
	pruneRows   = 16  // rows deleted per transaction: 16 MiB of records, so that commits get their turn
	vacuumPages = 512 // pages given back per transaction
)

// PruneBefore shortens a file that goes on for ever. It keeps the newest full
// checkpoint at or before host (ns UTC) and all that came after it, and deletes
// what lies before; without such a checkpoint it does nothing. It works in many
// short transactions, oldest first, so that commits go on between them and an
// interrupted one leaves a whole file. It gives the oldest record that is kept
// by number, or 0 when nothing was there to keep by.
//
// Free pages are used again by later commits. What exceeds a quarter of the file
// is given back to the disk.
func (f *File) PruneBefore(ctx context.Context, host int64) (oldest uint64, err error) {
	c, err := f.CheckpointAtHost(ctx, host, true)
	if errors.Is(err, ErrNoCheckpoint) {
		return 0, nil
	}
	if err != nil {
		return 0, err
	}
	// Checkpoints go first: none may be found whose records are gone. A blob
	// never spans a checkpoint, so its first record tells on which side it lies.
	for _, query := range []string{
		"DELETE FROM checkpoints WHERE seq<?1 AND seq IN (SELECT seq FROM checkpoints ORDER BY seq LIMIT ?2)",
		"DELETE FROM records WHERE first_seq<=?1 AND first_seq IN (SELECT first_seq FROM records ORDER BY first_seq LIMIT ?2)",
		"DELETE FROM chunks WHERE seq<=?1 AND id IN (SELECT id FROM chunks ORDER BY id LIMIT ?2)",
		"DELETE FROM events WHERE seq<=?1 AND id IN (SELECT id FROM events ORDER BY id LIMIT ?2)",
	} {
		for n := int64(pruneRows); n == pruneRows; {
			err := f.transact(ctx, "prune", func(tx *sql.Tx, _ *tail) error {
				done, err := tx.ExecContext(ctx, query, int64(c.Seq), pruneRows)
				if err != nil {
					return err
				}
				n, err = done.RowsAffected()
				return err
			})
			if err != nil {
				return 0, err
			}
			f.due(0)
		}
	}
	return c.Seq + 1, f.shrink(ctx)
}

func (f *File) shrink(ctx context.Context) error {
	for {
		var free, pages int
		err := f.transact(ctx, "shrink", func(tx *sql.Tx, _ *tail) error {
			err := tx.QueryRowContext(ctx, "SELECT freelist_count, page_count FROM pragma_freelist_count, pragma_page_count").Scan(&free, &pages)
			if err != nil || free <= pages/4 {
				return err
			}
			_, err = tx.ExecContext(ctx, fmt.Sprintf("PRAGMA incremental_vacuum(%d)", vacuumPages))
			return err
		})
		if err != nil || free <= pages/4 {
			return err
		}
		f.due(vacuumPages * pageSize)
	}
}
