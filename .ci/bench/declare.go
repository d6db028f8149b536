package main

import (
	"context"
	"fmt"
	"time"

	"golang.org/x/sync/errgroup"
	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/protobuf/types/known/durationpb"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// declaration is what the ith quantity declares.
func declaration(i int) *leadlinev1.Quantity {
	f := func(x float64) *float64 { return &x }
	q := &leadlinev1.Quantity{
		Unit:        "Cel",
		Description: fmt.Sprintf("temperature at point %d", i),
		Tolerance:   &leadlinev1.Tolerance{Lower: f(-26), Upper: f(-18)},
	}
	if walks(i) {
		q.Prior = &leadlinev1.Prior{Mean: f(-21), StandardDeviation: f(3)}
		q.Repeatability = &leadlinev1.Repeatability{StandardDeviation: f(0.8)}
		q.Dynamics = &leadlinev1.Dynamics{Model: &leadlinev1.Dynamics_RandomWalk_{RandomWalk: &leadlinev1.Dynamics_RandomWalk{
			StandardDeviation: f(0.5), Per: durationpb.New(time.Hour),
		}}}
	} else {
		q.Repeatability = &leadlinev1.Repeatability{Learned: &leadlinev1.Repeatability_Learned{}}
	}
	return q
}

func dial(address string) (*grpc.ClientConn, error) {
	return grpc.NewClient("passthrough:///"+address, grpc.WithTransportCredentials(insecure.NewCredentials()))
}

// declareAll declares the first n quantities, over gRPC.
func declareAll(ctx context.Context, s *process, n int) error {
	conn, err := dial(s.GRPC)
	if err != nil {
		return err
	}
	defer conn.Close()
	client := leadlinev1.NewQuantityServiceClient(conn)
	group, ctx := errgroup.WithContext(ctx)
	const callers = 64
	for c := range callers {
		group.Go(func() error {
			for i := c; i < n; i += callers {
				if _, err := client.DeclareQuantity(ctx, &leadlinev1.DeclareQuantityRequest{Id: quantityID(i), Quantity: declaration(i)}); err != nil {
					return fmt.Errorf("declare %s: %w", quantityID(i), err)
				}
			}
			return nil
		})
	}
	return group.Wait()
}
