"""From delivery to decision through the services, and what verification says of it afterwards."""

from labsite.trail.verify import verify
from reviews.models import Decision
from tests import builders


def test_a_lot_goes_from_delivery_to_approval_and_the_record_verifies(cast, lab, quick_computing):
    version = builders.approved_version(cast, lab)
    assert version.state == "approved"
    assert Decision.objects.get().by == cast.reviewer
    result = verify()
    assert result.ok, result.damages
