"""A trainer over a PyTorch network with one hidden layer: EWC's penalty, and exemplars where the plan has them."""

import numpy as np
import torch
from torch import nn
from torch.nn import functional

from hyperforecast.learning import Attempt, Trainer

IMPORTANCE = "importance_"


class Network(nn.Module):
    def __init__(self, n_features, hidden_units, n_classes):
        super().__init__()
        self.hidden = nn.Linear(n_features, hidden_units)
        self.output = nn.Linear(hidden_units, n_classes)

    def forward(self, Z):
        return self.output(self.features(Z))

    def features(self, Z):
        return torch.relu(self.hidden(Z))


class TorchTrainer(Trainer):
    """Momentum 0.9; the regularization is lambda of Kirkpatrick et al. 2017, eq. 3, from memory."""

    def learn(self, jobs, *, seed):
        return [_attempt(job, seed) for job in jobs]

    def class_scores(self, head, Z):
        with torch.no_grad():
            return _network(head)(torch.tensor(Z)).numpy()

    def features(self, head, Z):
        with torch.no_grad():
            return _network(head).features(torch.tensor(Z)).numpy()

    def consolidated(self, boundary, attempt, *, seed):
        """Add the importance of the weights to that of before: the mean square of the gradient over the new rows."""
        network = _network(attempt.head)
        importance = {name: torch.zeros_like(weights) for name, weights in network.named_parameters()}
        for row, code in zip(torch.tensor(boundary.Z), torch.tensor(boundary.y)):
            loss = functional.cross_entropy(network(row), code)
            for part, gradient in zip(importance.values(), torch.autograd.grad(loss, list(network.parameters()))):
                part += gradient**2 / len(boundary.y)
        if boundary.carryover is not None:
            for name, old in _tensors(boundary.carryover.head, importance, IMPORTANCE).items():
                importance[name][:len(old)] += old
        return {**attempt.head, **_arrays(importance, IMPORTANCE)}

    def facts(self, boundary, *, seed):
        """Only what costs little; the other descriptors of the model are missing."""
        if boundary.carryover is None:
            return {}
        head = boundary.carryover.head
        scores = torch.tensor(self.class_scores(head, boundary.Z))
        importance = np.concatenate([part.ravel() for name, part in head.items() if name.startswith(IMPORTANCE)])
        return {"confidence_new": float(torch.softmax(scores, 1).amax(1).mean()),
                "importance_mean": float(importance.mean()), "anchor_curvature": float(importance.max())}


def _attempt(job, seed):
    boundary, settings, plan = job.boundary, job.settings, job.boundary.plan
    with torch.random.fork_rng():
        torch.manual_seed(seed)
        network = Network(boundary.n_features, max(plan.hidden_units, 1), boundary.n_classes)
    anchors = []
    if boundary.carryover is not None:
        head = boundary.carryover.head
        weights = dict(network.named_parameters())
        old, importance = _tensors(head, weights), _tensors(head, weights, IMPORTANCE)
        with torch.no_grad():
            for name, part in old.items():
                # The output layer has grown by rows.
                weights[name][:len(part)] = part
        anchors = [(weights[name], old[name], importance[name]) for name in weights]
    Z = torch.tensor(np.concatenate([boundary.Z, job.exemplars.Z]))
    y = torch.tensor(np.concatenate([boundary.y, job.exemplars.y]))
    descent = torch.optim.SGD(network.parameters(), lr=settings.learning_rate, momentum=0.9)
    shuffle = torch.Generator().manual_seed(seed)
    for _ in range(plan.passes):
        for rows in torch.randperm(len(y), generator=shuffle).split(plan.batch_size):
            descent.zero_grad()
            loss = functional.cross_entropy(network(Z[rows]), y[rows])
            for now, old, importance in anchors:
                loss = loss + settings.regularization / 2 * (importance * (now[:len(old)] - old) ** 2).sum()
            loss.backward()
            descent.step()
    head = _arrays(network.state_dict())
    n_weights = sum(part.size for part in head.values())
    return Attempt(settings, head, diverged=not all(np.isfinite(part).all() for part in head.values()),
                   operations=6.0 * plan.passes * len(y) * n_weights)


def _network(head):
    """Return the network in a head."""
    n_classes, hidden_units = head["output_weight"].shape
    network = Network(head["hidden_weight"].shape[1], hidden_units, n_classes)
    network.load_state_dict(_tensors(head, network.state_dict()))
    return network


def _arrays(state, prefix=""):
    """Return named tensors as arrays; names in a head hold no dots."""
    return {prefix + name.replace(".", "_"): part.numpy().copy() for name, part in state.items()}


def _tensors(head, names, prefix=""):
    return {name: torch.tensor(head[prefix + name.replace(".", "_")]) for name in names}
