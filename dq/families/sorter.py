"""The sorter of transients into families: a scikit-learn estimator.

A random forest (Breiman 2001, Mach. Learn. 45 5) votes; its votes become calibrated
probabilities; sets of families keep a promised coverage; a novelty score lets it
decline. Sets and novelty follow from one strangeness: votes, distance and chimeras.
Everything that needs examples which the forest has not seen (calibration, bars of sets
and novelty) uses models grown without the example's whole block of time.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from sklearn.base import BaseEstimator, ClassifierMixin
from sklearn.ensemble import RandomForestClassifier
from sklearn.utils import check_random_state
from sklearn.utils.multiclass import check_classification_targets
from sklearn.utils.validation import (
    _check_sample_weight,
    check_is_fitted,
    validate_data,
)

from dq.errors import TrainingError
from dq.families.calibration import (
    METHODS,
    choose_map,
    fit_map,
    mapped_out_of_fold,
)
from dq.families.conformal import family_bars, sets_below
from dq.families.examples import (
    OutOfFold,
    check_families,
    check_weight,
    roots_of,
)
from dq.families.forest import Forest, pack
from dq.families.groups import group_folds
from dq.families.guard import UNKNOWN
from dq.families.labels import SEPARATOR
from dq.families.novelty import Signs, fit_signs, fit_tails, novelty_bar, of_chosen
from dq.families.space import fit_space
from dq.families.trust import borne_out, contradicted

#: Examples that one tree is grown from at most: on 5000 invented examples of 12
#: families, 2000 gave the same macro-F1 as all in half the time.
_TREE_EXAMPLES = 2000

#: What is decided of no rows: a quiet night is no error.
_NOTHING = pd.DataFrame(
    {
        "family": pd.Series(dtype=object),
        "probability": pd.Series(dtype=float),
        "family_set": pd.Series(dtype=object),
        "novelty": pd.Series(dtype=float),
    }
)


class FamilySorter(ClassifierMixin, BaseEstimator):
    """Sort transients into noise families, or decline.

    Parameters
    ----------
    n_trees : int
        Trees of each forest. 200 give votes in steps of 0.005.
    min_leaf : int
        Smallest number of examples in a leaf.
    n_folds : int
        Splits by time block for everything that is measured out of fold.
    alpha : float
        Fraction of a family's members that its sets may miss.
    reject : float
        Fraction of known examples that the novelty score may turn away.
    calibration : str
        ``auto`` keeps the map with the smallest held-out Brier score; or one of
        ``none``, ``temperature``, ``platt``, ``beta``, ``isotonic``.
    random_state : int
        Seed; equal tables and seed give an equal sorter.

    Attributes
    ----------
    classes_ : ndarray, shape (families,)
    forest_ : Forest
    map_ : dq.families.calibration.VoteMap
    bars_ : ndarray, shape (families,)
        Largest strangeness that a set admits.
    signs_ : dq.families.novelty.Signs
    tails_ : dq.families.novelty.Tails
    novelty_bar_ : float
        Raw novelty at which 1 lies.
    space_ : dq.families.space.Space
        Scale of every feature.
    known_, known_family_ : ndarray, shape (examples, features) and (examples,)
        The examples, against which drift is measured and unknowns are grouped.
    importance_ : ndarray, shape (features,)
        Mean decrease of impurity.
    calibration_scores_ : dict of str to float
        Held-out Brier score of each map tried.
    out_of_fold_ : OutOfFold or None
        None in a sorter read from a file.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> x = np.r_[rng.normal(0, 1, (40, 3)), rng.normal(6, 1, (40, 3))]
    >>> y = np.repeat(["knock", "whistle"], 40)
    >>> sorter = FamilySorter(n_trees=20).fit(x, y, groups=np.arange(80) // 4)
    >>> sorter.decide([[0.0, 0.0, 0.0]]).family.tolist()
    ['knock']
    """

    def __init__(
        self,
        n_trees=200,
        *,
        min_leaf=1,
        n_folds=5,
        alpha=0.1,
        reject=0.025,
        calibration="auto",
        random_state=0,
    ):
        self.n_trees = n_trees
        self.min_leaf = min_leaf
        self.n_folds = n_folds
        self.alpha = alpha
        self.reject = reject
        self.calibration = calibration
        self.random_state = random_state

    def __sklearn_tags__(self):
        """Say that missing values are welcome."""
        tags = super().__sklearn_tags__()
        tags.input_tags.allow_nan = True
        return tags

    def fit(self, X, y, groups=None, sample_weight=None, parent=None):
        """Train.

        Parameters
        ----------
        X : array_like or DataFrame, shape (n, features)
            NaN where a feature is missing.
        y : array_like, shape (n,)
            Families.
        groups : array_like, shape (n,), optional
            Block of time of each example; a block never stands on both sides of a
            split. Without it every example is a block of its own.
        sample_weight : array_like, shape (n,), optional
        parent : array_like of int, shape (n,), optional
            Row of the example that a replanted copy was made from, -1 for an example
            itself. Copies are trained on only where their parent is, and never scored.

        Returns
        -------
        FamilySorter
            Itself.

        Raises
        ------
        TrainingError
            Fewer than two families or blocks of time, a reserved family name, or a
            setting out of its bounds.
        """
        self.check_settings()
        X, y = validate_data(
            self, X, y, dtype=np.float64, ensure_all_finite="allow-nan"
        )
        check_classification_targets(y)
        weight = _check_sample_weight(sample_weight, X)
        self.classes_, truth = np.unique(y, return_inverse=True)
        check_families(self.classes_)
        check_weight(weight, truth, self.classes_)
        root = roots_of(parent, len(X))
        own = root == np.arange(len(X))
        groups = np.arange(len(X)) if groups is None else np.asarray(groups)
        if len(groups) != len(X):
            raise TrainingError(f"{len(groups)} groups for {len(X)} examples")
        group = np.unique(groups, return_inverse=True)[1][root]
        self._fit_out_of_fold(X, truth, weight, root, own, group)
        self.forest_, self.importance_ = self.grow(X, truth, weight)
        held = self.out_of_fold_
        good = held.rows[borne_out(held.votes, held.truth)]
        self.signs_ = self.learn_signs(X[good], truth[good])
        self.space_ = fit_space(X[own])
        self.known_ = X[own].astype(np.float32)
        self.known_family_ = truth[own].astype(np.int32)
        return self

    def _fit_out_of_fold(self, X, truth, weight, root, own, group):
        """Score every example by models without its block; set maps and bars."""
        rows = np.flatnonzero(own)
        blocks = len(np.unique(group[rows]))
        if blocks < 2:
            raise TrainingError(
                f"the examples lie in {blocks} block of time; at least 2 are needed "
                "to measure anything on time not trained on"
            )
        fold = group_folds(
            truth[rows],
            group[rows],
            folds=min(self.n_folds, blocks),
            rng=np.random.default_rng(self._seed(0)),
        )
        of_row = np.empty(len(X), dtype=np.int64)
        of_row[rows] = fold
        of_row = of_row[root]
        votes = np.zeros((len(rows), len(self.classes_)))
        for f in np.unique(fold):
            train = of_row != f
            forest, _ = self.grow(X[train], truth[train], weight[train])
            votes[fold == f] = forest.vote(X[rows[fold == f]])
        signs = self.signs_out_of_fold(X[rows], truth[rows], fold, votes)
        self.tails_ = fit_tails(votes, signs)
        strange = self.tails_.combine(votes, signs)
        self._set_bars(
            rows, truth[rows], fold, group[rows], votes, strange, weight[rows]
        )

    def signs_out_of_fold(self, X, truth, fold, votes) -> np.ndarray:
        """Measure each fold's signs of novelty as learnt from the others.

        Which labels are borne out follows from ``votes``, also out of fold: an example
        bears on what it is measured by only through forests that judged others.
        """
        good = borne_out(votes, truth)
        signs = np.zeros((len(X), votes.shape[1] + 1))
        for f in np.unique(fold):
            inside = fold == f
            learnt = self.learn_signs(X[good & ~inside], truth[good & ~inside])
            signs[inside] = learnt.measure(X[inside])
        return signs

    def _set_bars(self, rows, truth, fold, group, votes, strange, weight):
        method = self.calibration
        self.calibration_scores_ = {}
        if method == "auto":
            method, self.calibration_scores_ = choose_map(votes, truth, fold, weight)
        self.map_ = fit_map(method, votes, truth, weight)
        wrong = contradicted(votes, truth)
        raw = of_chosen(strange, votes)
        self.bars_ = family_bars(strange[~wrong], truth[~wrong], self.alpha)
        self.novelty_bar_ = novelty_bar(raw, self.reject)
        sets = np.zeros(votes.shape, dtype=bool)
        novelty = np.empty(len(raw))
        for f in np.unique(fold):
            # each fold is judged by bars that the other folds set
            inside, rest = fold == f, fold != f
            right = rest & ~wrong
            bars = family_bars(strange[right], truth[right], self.alpha)
            sets[inside] = sets_below(strange[inside], bars)
            novelty[inside] = raw[inside] / novelty_bar(raw[rest], self.reject)
        self.out_of_fold_ = OutOfFold(
            rows=rows,
            truth=truth,
            fold=fold,
            group=group,
            votes=votes,
            probability=mapped_out_of_fold(method, votes, truth, fold, weight),
            sets=sets,
            novelty=novelty,
            contradicted=wrong,
        )

    def learn_signs(self, X, truth) -> Signs:
        """Learn the signs of novelty from examples; ``truth`` are columns."""
        return fit_signs(
            X,
            truth,
            families=len(self.classes_),
            trees=max(self.n_trees // 2, 1),
            seed=self._seed(1),
        )

    def grow(self, X, truth, weight) -> tuple[Forest, np.ndarray]:
        """Grow a forest on examples; ``truth`` are columns. Gives importances too."""
        grown = RandomForestClassifier(
            n_estimators=self.n_trees,
            min_samples_leaf=self.min_leaf,
            class_weight="balanced",
            max_samples=min(_TREE_EXAMPLES, len(X)),
            random_state=self._seed(2),
            n_jobs=1,
        ).fit(X, truth, sample_weight=weight)
        forest = pack(grown.estimators_, grown.classes_, len(self.classes_))
        return forest, grown.feature_importances_

    def _seed(self, purpose: int) -> int:
        state = self.random_state
        if isinstance(state, int | np.integer):
            return int(
                np.random.SeedSequence([int(state), purpose]).generate_state(1)[0]
            )
        return int(check_random_state(state).randint(2**31 - 1))

    def check_settings(self):
        """Refuse a setting that is out of its bounds."""
        bounds = {"alpha": (0.0, 0.5), "reject": (0.0, 0.5)}
        for name, (low, high) in bounds.items():
            value = getattr(self, name)
            if not low < value <= high:
                raise TrainingError(
                    f"{name}={value} must lie above {low} and to {high}"
                )
        for name, low in {"n_trees": 1, "min_leaf": 1, "n_folds": 2}.items():
            if getattr(self, name) < low:
                raise TrainingError(f"{name}={getattr(self, name)} must be >= {low}")
        if self.calibration not in ("auto", *METHODS):
            raise TrainingError(
                f"calibration={self.calibration!r} must be auto or one of "
                f"{', '.join(METHODS)}"
            )

    def _votes(self, X) -> tuple[np.ndarray, np.ndarray]:
        check_is_fitted(self, "forest_")
        X = validate_data(
            self, X, reset=False, dtype=np.float64, ensure_all_finite="allow-nan"
        )
        return X, self.forest_.vote(X)

    def _strangeness(self, X, votes) -> np.ndarray:
        """Give how strange a member of each family an example would be."""
        return self.tails_.combine(votes, self.signs_.measure(X))

    def predict_proba(self, X) -> np.ndarray:
        """Give calibrated probabilities, shape (n, families)."""
        votes = self._votes(X)[1]
        return self.map_(votes)

    def predict(self, X) -> np.ndarray:
        """Give the most probable family of each row; never ``unknown``."""
        probability = self.predict_proba(X)
        return self.classes_[probability.argmax(axis=1)]

    def novelty(self, X) -> np.ndarray:
        """Give each row's novelty, 0 upward; beyond 1 the sorter declines."""
        X, votes = self._votes(X)
        return of_chosen(self._strangeness(X, votes), votes) / self.novelty_bar_

    def predict_set(self, X) -> np.ndarray:
        """Give the families that cannot be excluded: bool, shape (n, families).

        A set may be empty: about ``alpha`` of the known examples are stranger than the
        bar of every family.
        """
        X, votes = self._votes(X)
        return sets_below(self._strangeness(X, votes), self.bars_)

    def decide(self, X) -> pd.DataFrame:
        """Sort rows into families.

        Returns
        -------
        pandas.DataFrame
            Index as ``X``; ``family`` (``unknown`` where novelty exceeds 1),
            ``probability`` (of that family; missing for ``unknown``), ``family_set``
            (joined by ``;``, most voted first) and ``novelty``.
        """
        check_is_fitted(self, "forest_")
        if not len(X):
            return _NOTHING.copy()
        index = X.index if isinstance(X, pd.DataFrame) else None
        X, votes = self._votes(X)
        probability = self.map_(votes)
        strange = self._strangeness(X, votes)
        best = probability.argmax(axis=1)
        novelty = of_chosen(strange, votes) / self.novelty_bar_
        known = novelty <= 1.0
        family = np.where(known, self.classes_[best].astype(object), UNKNOWN)
        stated = np.where(known, probability[np.arange(len(best)), best], np.nan)
        sets = sets_below(strange, self.bars_)
        return pd.DataFrame(
            {
                "family": family,
                "probability": stated,
                "family_set": self._set_texts(sets, votes),
                "novelty": novelty,
            },
            index=index,
        )

    def _set_texts(self, sets: np.ndarray, votes: np.ndarray) -> list[str]:
        names = self.classes_.astype(str)
        order = np.argsort(-votes, axis=1, kind="stable")
        single = sets.sum(axis=1) == 1
        texts = np.where(single, names[sets.argmax(axis=1)], "").astype(object)
        for i in np.flatnonzero(sets.sum(axis=1) > 1):
            texts[i] = SEPARATOR.join(names[k] for k in order[i] if sets[i, k])
        return texts.tolist()
