package runfile

import (
	"context"
	"fmt"
)

// LimitPages keeps the file from growing beyond n pages, as a full disk does.
func LimitPages(ctx context.Context, f *File, n int) error {
	_, err := f.write.ExecContext(ctx, fmt.Sprintf("PRAGMA max_page_count=%d", n))
	return err
}

// ReadTransaction begins a read transaction, as another process may hold for
// long; end ends it.
func ReadTransaction(ctx context.Context, f *File) (end func() error, err error) {
	tx, err := f.read.BeginTx(ctx, nil)
	if err != nil {
		return nil, err
	}
	var n int
	if err := tx.QueryRowContext(ctx, "SELECT count(*) FROM records").Scan(&n); err != nil {
		return nil, err
	}
	return tx.Rollback, nil
}

// Codecs gives the codec of each blob of records, 0 = as committed, 1 = packed.
func Codecs(ctx context.Context, f *File) (list []int, err error) {
	err = f.blobs(ctx, 0, 1<<62, func(b *blob) error {
		list = append(list, b.codec)
		return nil
	})
	return list, err
}
