package main

import "context"

// contextUntil is a context that ends when a channel is closed.
func contextUntil(parent context.Context, end <-chan struct{}) (context.Context, context.CancelFunc) {
	ctx, cancel := context.WithCancel(parent)
	go func() {
		select {
		case <-end:
			cancel()
		case <-ctx.Done():
		}
	}()
	return ctx, cancel
}
