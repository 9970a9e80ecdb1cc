package runner

import (
	"context"

	"golang.org/x/sync/errgroup"
)

// overBlocks hands the numbers of n blocks to the workers, each with a fitter
// of its own. Where ahead is not nil, a block is handed out once ahead takes a
// token: whoever empties it sets the pace. The caller waits for the group.
func overBlocks(ctx context.Context, eg *errgroup.Group, n, workers int, ahead chan<- struct{}, do func(ft *fitter, block int) error) {
	next := make(chan int)
	eg.Go(func() error {
		defer close(next)
		for i := range n {
			if ahead != nil {
				select {
				case ahead <- struct{}{}:
				case <-ctx.Done():
					return ctx.Err()
				}
			}
			select {
			case next <- i:
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	for range max(1, workers) {
		eg.Go(func() error {
			ft := &fitter{}
			for i := range next {
				if err := do(ft, i); err != nil {
					return err
				}
			}
			return nil
		})
	}
}

// eachFit calls do for every standing fit, in parallel.
func eachFit(ctx context.Context, cf *curveFits, workers int, do func(*fitter, int) error) error {
	const block = 32
	eg, ctx := errgroup.WithContext(ctx)
	overBlocks(ctx, eg, (len(cf.fits)+block-1)/block, workers, nil, func(ft *fitter, b int) error {
		for i := b * block; i < min((b+1)*block, len(cf.fits)); i++ {
			if !cf.verdict[i].fits() {
				continue
			}
			if err := do(ft, i); err != nil {
				return err
			}
		}
		return nil
	})
	return eg.Wait()
}
