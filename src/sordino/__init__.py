from .facts import Guarantee, PublicFacts
from .plan import Plan, plan_fit
